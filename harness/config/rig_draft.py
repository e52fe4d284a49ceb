"""A rig file read table by table, before it is known to be right as a whole."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from harness.config.findings import (
    Entry,
    Findings,
    read_document,
    show,
    single_table,
    tables,
    unknown_keys,
)
from harness.config.rig_tables import (
    ActuatorTable,
    ItemTable,
    LoopTable,
    ModbusServerTable,
    OpcUaServerTable,
    OrificeTable,
    OverflowTable,
    RigTable,
    SourceTable,
    TransmitterTable,
    ValveTable,
    VesselTable,
)

if TYPE_CHECKING:
    from pydantic import BaseModel

PATH_KINDS: dict[str, type[BaseModel]] = {
    "orifice": OrificeTable,
    "overflow": OverflowTable,
    "valve": ValveTable,
}
LINK_KINDS: dict[str, type[BaseModel]] = {
    "modbus_server": ModbusServerTable,
    "opcua_server": OpcUaServerTable,
}
_ARRAYS = ("source", "vessel", "path", "transmitter", "actuator", "loop", "link")


@dataclass(frozen=True, slots=True, kw_only=True)
class RigDraft:
    """Every table of a rig file with what of it is right.

    Parameters
    ----------
    findings : Findings
        Problems so far.
    rig : Entry
        ``[rig]``.
    sources, vessels, paths, transmitters, actuators, loops, links : tuple of Entry
        In file order.
    items : dict of str to tuple of Entry
        Lines of the register map by the path of their link.
    """

    findings: Findings
    rig: Entry
    sources: tuple[Entry, ...]
    vessels: tuple[Entry, ...]
    paths: tuple[Entry, ...]
    transmitters: tuple[Entry, ...]
    actuators: tuple[Entry, ...]
    loops: tuple[Entry, ...]
    links: tuple[Entry, ...]
    items: dict[str, tuple[Entry, ...]]

    def of_kind(self, *models: type[BaseModel]) -> tuple[Entry, ...]:
        """Return the paths and links of the given kinds."""
        return tuple(each for each in (*self.paths, *self.links) if each.model in models)

    @property
    def valves(self) -> tuple[Entry, ...]:
        """Return the paths that are valves."""
        return self.of_kind(ValveTable)


def tags(entries: tuple[Entry, ...]) -> tuple[str, ...]:
    """Return the tags written in some tables, also of those with other problems."""
    return tuple(each.raw["tag"] for each in entries if isinstance(each.raw.get("tag"), str))


def with_tag(entries: tuple[Entry, ...], tag: str | None) -> Entry | None:
    """Return the first table of a tag, or None."""
    return next((each for each in entries if tag and each.raw.get("tag") == tag), None)


def read_rig(text: str, name: str) -> RigDraft:
    """Read a rig file table by table.

    Parameters
    ----------
    text : str
        The text.
    name : str
        Name of the file, for messages.

    Returns
    -------
    RigDraft
        The tables, each validated for itself.

    Raises
    ------
    ConfigurationError
        When the text is no TOML, or of another format.
    """
    document, findings = read_document(text, name)
    unknown_keys(document, ("format", "rig", *_ARRAYS), findings)
    links = _of_kinds(document, "link", LINK_KINDS, findings)
    return RigDraft(
        findings=findings,
        rig=Entry("rig", single_table(document, "rig", findings), RigTable, findings),
        sources=_array(document, "source", SourceTable, findings),
        vessels=_array(document, "vessel", VesselTable, findings),
        paths=_of_kinds(document, "path", PATH_KINDS, findings),
        transmitters=_array(document, "transmitter", TransmitterTable, findings),
        actuators=_array(document, "actuator", ActuatorTable, findings),
        loops=_array(document, "loop", LoopTable, findings),
        links=links,
        items={link.path: _items(link, findings) for link in links},
    )


def _array(
    document: dict[str, Any], name: str, model: type[BaseModel], findings: Findings
) -> tuple[Entry, ...]:
    return tuple(
        Entry(f"{name}[{index}]", raw, model, findings)
        for index, raw in enumerate(tables(document, name, findings))
    )


def _of_kinds(
    document: dict[str, Any], name: str, kinds: dict[str, type[BaseModel]], findings: Findings
) -> tuple[Entry, ...]:
    """Return the entries of an array whose tables say by ``kind`` what they are."""
    entries = []
    for index, raw in enumerate(tables(document, name, findings)):
        path = f"{name}[{index}]"
        kind = raw.get("kind")
        if "kind" not in raw:
            findings.add(path, f"kind is missing; it is one of {', '.join(kinds)}")
        elif not isinstance(kind, str) or kind not in kinds:
            listed = ", ".join(kinds)
            findings.add(
                f"{path}.kind", f"{show(kind)} is no kind of {name}; kinds are {listed}"
            )
        else:
            entries.append(Entry(path, raw, kinds[kind], findings))
    return tuple(entries)


def _items(link: Entry, findings: Findings) -> tuple[Entry, ...]:
    items = link.get("items") or []
    return tuple(
        Entry(f"{link.path}.items[{index}]", raw, ItemTable, findings)
        for index, raw in enumerate(items)
    )
