"""Every number that a public docstring describes carries its unit in brackets."""

import ast
import re
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
SOURCES = sorted(
    path
    for folder in ("harness", "plants")
    for path in (ROOT / folder).rglob("*.py")
    if not path.name.startswith("_") or path.name == "__init__.py"
)

SECTION = re.compile(r"^(\w[\w ]*)\n-{3,}\n", re.MULTILINE)
ENTRY = re.compile(r"^(\S[^\n]*)$", re.MULTILINE)
NUMERIC = re.compile(r"\b(float|int|float64|int64|ndarray|NDArray|array)\b")
MEASURE = re.compile(r"\b(float|float64)\b")  # what even a one-line docstring must give a unit
UNIT = re.compile(r"\[[^\]\n]+\]|\bunits?\b")  # "[m]", or in words: "in the unit of the tag"

# The kernels' arrays hold many quantities; plants/layout.py gives the unit of each place.
MIXED = {"table", "parameters", "state", "work", "counters"}


@dataclass(frozen=True)
class Entry:
    """One entry of a numpydoc section: names, type and description."""

    names: tuple[str, ...]
    kind: str
    text: str


def sections(docstring: str) -> dict[str, list[Entry]]:
    """Split a cleaned numpydoc docstring into its sections' entries."""
    marks = list(SECTION.finditer(docstring))
    ends = [*(mark.start() for mark in marks[1:]), len(docstring)][: len(marks)]
    return {
        mark.group(1): entries(docstring[mark.end() : end])
        for mark, end in zip(marks, ends, strict=True)
    }


def entries(body: str) -> list[Entry]:
    heads = list(ENTRY.finditer(body))
    ends = [*(head.start() for head in heads[1:]), len(body)][: len(heads)]
    found = []
    for head, end in zip(heads, ends, strict=True):
        names, _, kind = head.group(1).partition(" : ")
        text = body[head.end() : end]
        split = tuple(name.strip().lstrip("*") for name in names.split(","))
        found.append(Entry(split, kind or names, text))
    return found


def public_parts(
    tree: ast.Module,
) -> Iterator[ast.FunctionDef | ast.AsyncFunctionDef | ast.ClassDef]:
    """Yield public functions and classes of a module, and public methods of public classes."""
    stack: list[ast.stmt] = list(tree.body)
    while stack:
        node = stack.pop(0)
        if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef | ast.ClassDef):
            if node.name.startswith("_"):
                continue
            yield node
            if isinstance(node, ast.ClassDef):
                stack = list(node.body) + stack


def annotations(
    node: ast.FunctionDef | ast.AsyncFunctionDef | ast.ClassDef,
) -> dict[str, str]:
    """Return the annotations of a function's arguments, or of a class's public fields."""
    if isinstance(node, ast.ClassDef):
        return {
            item.target.id: ast.unparse(item.annotation)
            for item in node.body
            if isinstance(item, ast.AnnAssign)
            and isinstance(item.target, ast.Name)
            and not item.target.id.startswith("_")
        }
    arguments = [*node.args.posonlyargs, *node.args.args, *node.args.kwonlyargs]
    return {a.arg: ast.unparse(a.annotation) for a in arguments if a.annotation is not None}


def numbers(kinds: dict[str, str], pattern: re.Pattern[str]) -> list[str]:
    return [n for n, kind in kinds.items() if pattern.search(kind) and "Callable" not in kind]


def needs_unit(entry: Entry) -> bool:
    if "ndarray" in entry.kind and set(entry.names) <= MIXED:
        return False
    return bool(NUMERIC.search(entry.kind)) and "allable" not in entry.kind


def complaints(node: ast.FunctionDef | ast.AsyncFunctionDef | ast.ClassDef) -> Iterator[str]:
    """Yield what is missing in the docstring of one function or class."""
    docstring = ast.get_docstring(node)
    if docstring is None:
        return  # the linter's matter
    found = sections(docstring)
    described = [*found.get("Parameters", []), *found.get("Attributes", [])]
    for entry in [*described, *found.get("Returns", []), *found.get("Yields", [])]:
        if needs_unit(entry) and not UNIT.search(entry.text):
            yield f"{', '.join(entry.names)}: no [unit]"
    kinds = annotations(node)
    names = {name for entry in described for name in entry.names}
    if described:
        wanted = numbers(kinds, NUMERIC)
        yield from (f"{name}: not described" for name in wanted if name not in names)
    elif (wanted := numbers(kinds, MEASURE)) and not UNIT.search(docstring):
        yield f"{', '.join(wanted)}: neither described nor a [unit] in the docstring"
    if (
        isinstance(node, ast.FunctionDef)
        and node.returns is not None
        and ast.unparse(node.returns) == "float"
        and "Returns" not in found
        and not UNIT.search(docstring)
    ):
        yield "returned number: no [unit]"


def check(source: str, name: str) -> list[str]:
    return [
        f"{name}:{node.lineno}: {node.name}: {complaint}"
        for node in public_parts(ast.parse(source))
        for complaint in complaints(node)
    ]


def test_every_number_has_its_unit() -> None:
    found = [
        line
        for path in SOURCES
        for line in check(path.read_text(encoding="utf-8"), path.relative_to(ROOT).as_posix())
    ]
    assert not found, "\n" + "\n".join(found)


GOOD = '''
def flow(kv: float, pressures: "NDArray[np.float64]") -> float:
    """Return a flow.

    Parameters
    ----------
    kv : float
        Coefficient [m3/h].
    pressures : ndarray, shape (n,)
        Pressures [Pa].

    Returns
    -------
    float
        Flow [m3/s].
    """
'''


def test_a_complete_docstring_passes() -> None:
    assert check(GOOD, "good.py") == []


@pytest.mark.parametrize(
    ("old", "new", "complaint"),
    [
        (" [m3/h]", "", "bad.py:2: flow: kv: no [unit]"),
        (" [Pa]", "", "bad.py:2: flow: pressures: no [unit]"),
        (" [m3/s]", "", "bad.py:2: flow: float: no [unit]"),
        (
            "    kv : float\n        Coefficient [m3/h].\n",
            "",
            "bad.py:2: flow: kv: not described",
        ),
    ],
)
def test_what_is_missing_is_named(old: str, new: str, complaint: str) -> None:
    assert check(GOOD.replace(old, new), "bad.py") == [complaint]


def test_a_bare_one_line_docstring_is_refused() -> None:
    source = 'def area(diameter: float) -> float:\n    """Return the area."""\n'
    assert check(source, "bad.py") == [
        "bad.py:1: area: diameter: neither described nor a [unit] in the docstring",
        "bad.py:1: area: returned number: no [unit]",
    ]
