"""Looking into the verdict document, whose optional parts may be absent."""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Mapping

Document = dict[str, object]


def part(document: Mapping[str, object], key: str) -> Document:
    """Return the object of that key, empty when there is none."""
    value = document.get(key)
    return value if isinstance(value, dict) else {}


def parts(document: Mapping[str, object], key: str) -> list[Document]:
    """Return the objects in the list of that key, empty when there is none."""
    value = document.get(key)
    return [item for item in value if isinstance(item, dict)] if isinstance(value, list) else []


def named_parts(document: Mapping[str, object], key: str) -> dict[str, Document]:
    """Return the objects by name under that key, in their order."""
    return {
        name: value for name, value in part(document, key).items() if isinstance(value, dict)
    }


def number(document: Mapping[str, object], key: str) -> float | None:
    """Return the number of that key, None when there is none."""
    value = document.get(key)
    return (
        float(value)
        if isinstance(value, (int, float)) and not isinstance(value, bool)
        else None
    )


def numbers(document: Mapping[str, object], key: str) -> list[float]:
    """Return the numbers in the list of that key, empty when there is none."""
    value = document.get(key)
    items = value if isinstance(value, (list, tuple)) else []
    return [float(item) for item in items if isinstance(item, (int, float))]


def text(document: Mapping[str, object], key: str) -> str:
    """Return the text of that key, empty when there is none."""
    value = document.get(key)
    return "" if value is None else str(value)


def texts(document: Mapping[str, object], key: str) -> list[str]:
    """Return the texts in the list of that key, empty when there is none."""
    value = document.get(key)
    return [str(item) for item in value] if isinstance(value, (list, tuple)) else []
