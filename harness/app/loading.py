"""Rig and trial files with what the command line changes of them."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass
from pathlib import Path

from harness.config.load import load_rig, load_trial
from harness.domain.rig import ModbusServerLink, OpcUaServerLink, Rig
from harness.domain.trial import Trial
from harness.errors import UsageError


@dataclass(frozen=True, slots=True, kw_only=True)
class LinkChoice:
    """What the command line says of the links.

    Parameters
    ----------
    only : str or None
        Name or kind (``"modbus"``, ``"opcua"``) of the one link to open; None opens all.
    host : str or None
        Address to listen on, or to reach.
    modbus_port, opcua_port : int or None
        TCP ports [-].
    """

    only: str | None = None
    host: str | None = None
    modbus_port: int | None = None
    opcua_port: int | None = None


def read_rig(path: Path, links: LinkChoice | None = None) -> tuple[Rig, str]:
    """Read a rig file.

    Parameters
    ----------
    path : Path
        The file.
    links : LinkChoice or None
        Changes of its links.

    Returns
    -------
    Rig
        The rig.
    str
        The file's text.

    Raises
    ------
    ConfigurationError
        With every problem of the file.
    UsageError
        When a link is asked for that the rig does not have.
    """
    rig, text = load_rig(path)
    return with_links(rig, links, str(path)), text


def with_links(rig: Rig, links: LinkChoice | None, name: str) -> Rig:
    """Return a rig with the command line's changes of its links.

    Parameters
    ----------
    rig : Rig
        The rig.
    links : LinkChoice or None
        The changes; None for none.
    name : str
        Where the rig is from, for a message.

    Raises
    ------
    UsageError
        When a link is asked for that the rig does not have.
    """
    if links is None:
        return rig
    chosen = [_changed(link, links) for link in rig.links if _is_chosen(link, links.only)]
    if links.only is not None and not chosen:
        names = ", ".join(link.name for link in rig.links) or "none"
        raise UsageError(f'{name}: no link "{links.only}" in this rig; it has {names}')
    return dataclasses.replace(rig, links=tuple(chosen))


def read_trial(path: Path, rig: Rig, phases: tuple[str, ...] = ()) -> tuple[Trial, str]:
    """Read a trial file, and cut it to chosen phases.

    Parameters
    ----------
    path : Path
        The file.
    rig : Rig
        The rig that it is for.
    phases : tuple of str
        Names of the phases to run; empty for all.

    Returns
    -------
    Trial
        The trial.
    str
        The file's text.

    Raises
    ------
    ConfigurationError
        With every problem of the file.
    UsageError
        When a phase is asked for that the trial does not have.
    """
    trial, text = load_trial(path, rig)
    return only_phases(trial, phases), text


def only_phases(trial: Trial, phases: tuple[str, ...]) -> Trial:
    """Return a trial cut to chosen phases.

    Parameters
    ----------
    trial : Trial
        The trial.
    phases : tuple of str
        Names, which may have been split at a comma; empty for all.

    Raises
    ------
    UsageError
        When there is no phase of a name.
    """
    if not phases:
        return trial
    wanted = _known_names(phases, trial)
    kept = tuple(phase for phase in trial.phases if phase.name in wanted)
    return dataclasses.replace(trial, phases=kept)


def _known_names(parts: tuple[str, ...], trial: Trial) -> set[str]:
    """Return the phases that are named; a name with a comma in it may come in its parts."""
    known = {_bare(phase.name): phase.name for phase in trial.phases}
    wanted: set[str] = set()
    start = 0
    while start < len(parts):
        for end in range(len(parts), start, -1):
            name = known.get(_bare(",".join(parts[start:end])))
            if name is not None:
                wanted.add(name)
                start = end
                break
        else:
            raise UsageError(
                f'trial "{trial.name}" has no phase "{parts[start]}"; it has '
                + ", ".join(f'"{phase.name}"' for phase in trial.phases)
            )
    return wanted


def _bare(name: str) -> str:
    return ",".join(part.strip() for part in name.split(","))


def _is_chosen(link: ModbusServerLink | OpcUaServerLink, only: str | None) -> bool:
    kind = "modbus" if isinstance(link, ModbusServerLink) else "opcua"
    return only is None or only in {link.name, kind}


def _changed(
    link: ModbusServerLink | OpcUaServerLink, links: LinkChoice
) -> ModbusServerLink | OpcUaServerLink:
    host = links.host or link.host
    if isinstance(link, ModbusServerLink):
        port = link.port if links.modbus_port is None else links.modbus_port
        return dataclasses.replace(link, host=host, port=port)
    port = link.port if links.opcua_port is None else links.opcua_port
    return dataclasses.replace(link, host=host, port=port)
