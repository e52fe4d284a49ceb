"""The soft PLC as a process: which link, which loop, and how it is stopped."""

from __future__ import annotations

import asyncio
import signal
import threading
from contextlib import contextmanager
from typing import TYPE_CHECKING

from harness.domain.points import points_of
from harness.domain.rig import ModbusServerLink, OpcUaServerLink
from harness.errors import UsageError
from harness.runtime.clock import PacedClock
from harness.runtime.plc_block import NO_FAULTS, SoftPlcFaults, program_of, warm_up
from harness.runtime.plc_mistakes import MistakenClient, Setup, mistake_of
from harness.runtime.plc_panel import Panel, PanelClient
from harness.runtime.soft_plc import run_soft_plc
from harness.runtime.steadiness import set_memory_aside, steady_threads

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator, Sequence

    from harness.domain.rig import Loop, Rig
    from harness.domain.signals import Point
    from harness.links.client import FieldClient
    from harness.runtime.lines import Lines
    from harness.runtime.plc_block import PlcProgram


def run_soft_plc_blocking(
    rig: Rig,
    link: str,
    loop_tag: str,
    pace: float,
    on_event: Callable[[str], None],
    *,
    host: str | None = None,
    port: int | None = None,
    scan: float | None = None,
    faults: SoftPlcFaults = NO_FAULTS,
    mistake: str | None = None,
    panel: Lines | None = None,
) -> None:
    """Run the soft PLC until Ctrl-C or a request of the system to end; the body of a process.

    Parameters
    ----------
    rig : Rig
        The rig, for its points, map and loop.
    link : str
        Name of a link of the rig, or ``"modbus"`` or ``"opcua"`` for the first of that kind.
    loop_tag : str
        Tag of the loop.
    pace : float
        Plant seconds per wall second [-].
    on_event : callable
        Takes one line for people at each change.
    host : str or None
        Where the rig is; None takes the link's address.
    port : int or None
        Its port; None takes the link's [-].
    scan : float or None
        Scan period; None takes the loop's [plant s].
    faults : SoftPlcFaults
        Faults of the block made on purpose.
    mistake : str or None
        Name of a mistake of ``plc_mistakes.MISTAKES`` made on purpose.
    panel : Lines or None
        What is typed at its panel, where it takes nothing over the link; None takes orders there.

    Raises
    ------
    UsageError
        When the rig has no such link or loop, or the table no such mistake.
    """
    client, program = soft_plc_parts(
        rig, link, loop_tag, host=host, port=port, scan=scan, faults=faults, mistake=mistake
    )
    if panel is not None:
        face = Panel(loop=program.loop, measured=program.measured)
        client = PanelClient(client, face, panel, on_event)
    warm_up(program)
    set_memory_aside()
    with steady_threads():
        asyncio.run(_run_until_signal(client, program, pace, on_event))


def soft_plc_parts(
    rig: Rig,
    link: str,
    loop_tag: str,
    *,
    host: str | None = None,
    port: int | None = None,
    scan: float | None = None,
    faults: SoftPlcFaults = NO_FAULTS,
    mistake: str | None = None,
) -> tuple[FieldClient, PlcProgram]:
    """Return client and program of a soft PLC; see `run_soft_plc_blocking`.

    Parameters
    ----------
    rig : Rig
        The rig, for its points, map and loop.
    link : str
        Name of a link of the rig, or ``"modbus"`` or ``"opcua"`` for the first of that kind.
    loop_tag : str
        Tag of the loop.
    host : str or None
        Where the rig is; None takes the link's address.
    port : int or None
        Its port; None takes the link's [-].
    scan : float or None
        Scan period; None takes the loop's [plant s].
    faults : SoftPlcFaults
        Faults of the block made on purpose.
    mistake : str or None
        Name of a mistake of the table.

    Raises
    ------
    UsageError
        When the rig has no such link or loop, or the table no such mistake.
    """
    points = points_of(rig, external=True)
    end, loop = find_link(rig, link), _loop(rig, loop_tag)
    shown = shown_points(end, points)
    if mistake is None:
        return make_client(end, points, host, port), program_of(
            loop, points, scan, faults, shown
        )
    made = mistake_of(mistake)
    if not isinstance(end, ModbusServerLink):
        raise UsageError(
            f'mistake "{mistake}": it is one of a register map; take a Modbus link'
        )
    setup = made.apply(Setup(loop=loop, link=end, points=points, faults=faults))
    client = MistakenClient(make_client(setup.link, setup.points, host, port), setup)
    return client, program_of(loop, points, scan, setup.faults, shown)


def find_link(rig: Rig, link: str) -> ModbusServerLink | OpcUaServerLink:
    """Return a link by its name, or the first of a kind.

    Parameters
    ----------
    rig : Rig
        The rig.
    link : str
        Name of a link, or ``"modbus"`` or ``"opcua"``.

    Returns
    -------
    ModbusServerLink or OpcUaServerLink
        The link.

    Raises
    ------
    UsageError
        When there is none.
    """
    kinds = {"modbus": ModbusServerLink, "opcua": OpcUaServerLink}
    for each in rig.links:
        if each.name == link:
            return each
    for each in rig.links:
        if link in kinds and isinstance(each, kinds[link]):
            return each
    names = ", ".join(each.name for each in rig.links) or "none"
    raise UsageError(
        f'link "{link}" is not one of rig {rig.name}; it has {names}. Give one of these names, '
        "or modbus or opcua for the first of its kind"
    )


def shown_points(
    link: ModbusServerLink | OpcUaServerLink, points: Sequence[Point]
) -> frozenset[str]:
    """Return the names of the points that a link has.

    Parameters
    ----------
    link : ModbusServerLink or OpcUaServerLink
        The link.
    points : sequence of Point
        The points of the rig.

    Returns
    -------
    frozenset of str
        Of a register map, its points; of OPC UA, those named in the rig file or all.
    """
    if isinstance(link, ModbusServerLink):
        return frozenset(item.point for item in link.items)
    return frozenset(link.points or (point.name for point in points))


def make_client(
    link: ModbusServerLink | OpcUaServerLink,
    points: Sequence[Point],
    host: str | None = None,
    port: int | None = None,
) -> FieldClient:
    """Return the controller's end of a link.

    Parameters
    ----------
    link : ModbusServerLink or OpcUaServerLink
        The rig's end.
    points : sequence of Point
        The points of the rig.
    host : str or None
        Where the rig is; None takes the link's address.
    port : int or None
        Its port; None takes the link's [-].

    Returns
    -------
    FieldClient
        A client, not yet connected; its library is loaded here.
    """
    match link:
        case ModbusServerLink():
            from harness.links.modbus.client import ModbusFieldClient  # noqa: PLC0415

            return ModbusFieldClient(
                host=host or link.host,
                port=port or link.port,
                unit=link.unit,
                points=tuple(points),
                items=link.items,
            )
        case OpcUaServerLink():
            from harness.links.opcua.client import OpcUaClient  # noqa: PLC0415

            return OpcUaClient(_url(host or link.host, port or link.port))


def _url(host: str, port: int) -> str:
    return f"opc.tcp://[{host}]:{port}" if ":" in host else f"opc.tcp://{host}:{port}"


def _loop(rig: Rig, tag: str) -> Loop:
    try:
        return rig.loop(tag)
    except KeyError:
        names = ", ".join(loop.tag for loop in rig.loops) or "none"
        raise UsageError(f'loop "{tag}" is not one of rig {rig.name}; it has {names}') from None


async def _run_until_signal(
    client: FieldClient, program: PlcProgram, pace: float, on_event: Callable[[str], None]
) -> None:
    stop = asyncio.Event()
    with _stopped_by_signals(stop):
        await run_soft_plc(
            client, program, stop, clock=PacedClock(), pace=pace, on_event=on_event
        )


@contextmanager
def _stopped_by_signals(stop: asyncio.Event) -> Iterator[None]:
    """Let Ctrl-C and a request to end set the event, where this thread may ask for it."""
    loop = asyncio.get_running_loop()

    def ask_to_stop(*_: object) -> None:
        loop.call_soon_threadsafe(stop.set)

    names = ("SIGINT", "SIGTERM", "SIGBREAK")  # the last on Windows only
    known = [getattr(signal, name) for name in names if hasattr(signal, name)]
    if threading.current_thread() is not threading.main_thread():
        known = []
    before = [(number, signal.signal(number, ask_to_stop)) for number in known]
    try:
        yield
    finally:
        for number, handler in before:
            signal.signal(number, handler)
