"""Checks of a rig's plant that no table can make alone: tags, path ends, rings, rims."""

from __future__ import annotations

import re
from typing import TYPE_CHECKING

from harness.config.findings import not_one_of
from harness.config.rig_draft import tags, with_tag
from harness.config.rig_tables import OrificeTable, OverflowTable
from harness.domain.rig import DRAIN

if TYPE_CHECKING:
    from harness.config.findings import Entry
    from harness.config.rig_draft import RigDraft

# ISA-5.1 (values from memory): letters of the measured variable and the function, a hyphen,
# the loop number, and a suffix letter where there are several.
_NUMBER = r"-\d{1,5}[A-Z]?"
_FORMS = {
    "vessel": (r"[A-Z]{1,4}" + _NUMBER, "TK-101"),
    "source": (r"[A-Z][A-Z0-9]*(-[A-Z0-9]+)*", "PW-HEADER"),
    "path": (r"[A-Z]{2,4}" + _NUMBER, "RO-101"),
    "valve": (r"[A-Z]{1,3}V" + _NUMBER, "FV-101"),
    "transmitter": (r"[A-Z]{1,3}T" + _NUMBER, "LT-101"),
    "loop": (r"[A-Z]I?C" + _NUMBER, "LIC-101"),
}


def check_plant(draft: RigDraft) -> None:
    """Note every problem of tags, vessels, paths and actuators.

    Parameters
    ----------
    draft : RigDraft
        The file; its findings take the problems.
    """
    _presence(draft)
    _tag_forms(draft)
    _duplicate_tags(draft)
    for path in draft.paths:
        _path_ends(path, draft)
    _rings(draft)
    for vessel in draft.vessels:
        _vessel(vessel, draft)
    for overflow in draft.of_kind(OverflowTable):
        _crest(overflow, draft)
    _actuators(draft)


def _presence(draft: RigDraft) -> None:
    if not draft.vessels:
        draft.findings.add("vessel", "is missing; a rig has at least one [[vessel]]")


def _tag_forms(draft: RigDraft) -> None:
    valves = set(draft.valves)
    groups = (
        ("source", draft.sources),
        ("vessel", draft.vessels),
        ("path", tuple(path for path in draft.paths if path not in valves)),
        ("valve", draft.valves),
        ("transmitter", draft.transmitters),
        ("loop", draft.loops),
    )
    for what, entries in groups:
        pattern, example = _FORMS[what]
        for entry in entries:
            tag = entry.text("tag")
            if tag == DRAIN:
                entry.problem(
                    "tag", f'"{DRAIN}" is where liquid leaves the rig; name it otherwise'
                )
            elif tag and not re.fullmatch(pattern, tag):
                entry.problem(
                    "tag",
                    f"{entry.shown('tag')} is not a tag for a {what}; capitals, a hyphen and"
                    f' a number after ISA-5.1, e.g. "{example}"',
                )


def _duplicate_tags(draft: RigDraft) -> None:
    seen: dict[str, str] = {}
    for entry in (
        *draft.sources,
        *draft.vessels,
        *draft.paths,
        *draft.transmitters,
        *draft.loops,
    ):
        tag = entry.text("tag")
        if tag and seen.setdefault(tag, entry.path) != entry.path:
            entry.problem("tag", f'"{tag}" is already the tag of {seen[tag]}; tags are unique')


def _path_ends(path: Entry, draft: RigDraft) -> None:
    vessels, sources = tags(draft.vessels), tags(draft.sources)
    origin, destination = path.text("origin"), path.text("destination")
    free = path not in draft.valves
    if origin and free and origin not in vessels:
        path.problem("from", not_one_of(origin, vessels, "this rig", "vessel"))
    if origin and not free and origin not in sources:
        path.problem("from", not_one_of(origin, sources, "this rig", "source"))
    if destination and destination not in (*vessels, DRAIN):
        ends = (*vessels, DRAIN) if free else vessels
        path.problem("to", not_one_of(destination, ends, "this rig", "vessel"))
    elif destination == DRAIN and not free:
        path.problem("to", f'"{DRAIN}" is for outlets; a valve feeds a vessel')


def _rings(draft: RigDraft) -> None:
    """Liquid falls along outlets and overflows, so that they cannot lead back."""
    falls: dict[str, list[tuple[str, Entry]]] = {}
    for path in draft.of_kind(OrificeTable, OverflowTable):
        origin, destination = path.text("origin"), path.text("destination")
        if origin and destination:
            falls.setdefault(origin, []).append((destination, path))
    finished: set[str] = set()

    def follow(vessel: str, trail: tuple[str, ...]) -> None:
        for destination, path in falls.get(vessel, []):
            if destination in trail:
                ring = " -> ".join((*trail[trail.index(destination) :], destination))
                path.problem("to", f'"{destination}" closes a ring, {ring}; liquid only falls')
            elif destination not in finished:
                follow(destination, (*trail, destination))
        finished.add(vessel)

    for vessel in falls:
        if vessel not in finished:
            follow(vessel, (vessel,))


def _vessel(vessel: Entry, draft: RigDraft) -> None:
    tag = vessel.text("tag")
    ends = {
        end for path in draft.paths for end in (path.text("origin"), path.text("destination"))
    }
    if tag and tag not in ends:
        vessel.problem("tag", f'"{tag}" has no path; let one lead into it or out of it')
    level, height = vessel.number("initial_level"), vessel.number("height")
    if level is not None and height is not None and level > height:
        vessel.problem(
            "initial_level",
            f"{vessel.shown('initial_level')} is above the rim at {vessel.shown('height')}",
        )


def _crest(overflow: Entry, draft: RigDraft) -> None:
    vessel = with_tag(draft.vessels, overflow.text("origin"))
    crest = overflow.number("crest")
    height = vessel.number("height") if vessel else None
    if vessel and crest is not None and height is not None and crest >= height:
        overflow.problem(
            "crest",
            f"{overflow.shown('crest')} is not below the rim of {vessel.raw['tag']}"
            f" at {vessel.shown('height')}",
        )


def _actuators(draft: RigDraft) -> None:
    valves = tags(draft.valves)
    seen: dict[str, str] = {}
    for actuator in draft.actuators:
        tag = actuator.text("tag")
        if tag and tag not in valves:
            actuator.problem("tag", not_one_of(tag, valves, "this rig", "valve"))
        elif tag and seen.setdefault(tag, actuator.path) != actuator.path:
            actuator.problem("tag", f'"{tag}" has its actuator in {seen[tag]}; it has one')
    for valve in draft.valves:
        tag = valve.text("tag")
        if tag and tag not in tags(draft.actuators):
            valve.problem("tag", f'"{tag}" has no [[actuator]]; write one with this tag')
