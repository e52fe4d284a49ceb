"""Measure what the project promises to be fast at, beside yardsticks from the same run.

Prints a table, or with ``--json`` the same figures by name. It judges nothing and tests
nothing: a shared machine is too uneven for that. Compare figures of one run with each other,
rather than with those of another day.
"""

from __future__ import annotations

import argparse
import sys
from typing import TYPE_CHECKING

import _environment

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator

    from _figures import Figure


def start_up(options: argparse.Namespace) -> Iterator[Figure]:
    """Measure how long the command takes to answer ``--help``."""
    from _bench_start import start_up as section  # noqa: PLC0415  only in the environment

    return section(options.rounds)


def loops(options: argparse.Namespace) -> Iterator[Figure]:
    """Measure an hour of the two-tank loop, and the same loop in other tools."""
    from _bench_loops import loops as section  # noqa: PLC0415

    return section(options.rounds)


def lateness(options: argparse.Namespace) -> Iterator[Figure]:
    """Measure how late a tick of 10 ms is under load, beside a bare timer."""
    from _bench_lateness import lateness as section  # noqa: PLC0415

    return section(options.minutes)


SECTIONS: dict[str, Callable[[argparse.Namespace], Iterator[Figure]]] = {
    "start": start_up,
    "loops": loops,
    "lateness": lateness,
}


def main() -> int:
    """Run the sections asked for and print their figures."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument(
        "--json", action="store_true", help="print the figures as JSON in place of the table"
    )
    parser.add_argument(
        "--only", action="append", choices=list(SECTIONS), help="may be repeated"
    )
    parser.add_argument(
        "--minutes",
        type=float,
        default=1.0,
        help="length of each series of ticks; p99.9 means little below ten (default 1)",
    )
    parser.add_argument(
        "--rounds", type=int, default=5, help="rounds of alternating blocks (default 5)"
    )
    options = parser.parse_args()

    from _figures import as_json, as_table  # noqa: PLC0415

    figures: list[Figure] = []
    for name in options.only or SECTIONS:
        print(f"measuring: {name}", file=sys.stderr, flush=True)
        found = list(SECTIONS[name](options))
        figures += found
        if not options.json:
            print(as_table(found), flush=True)
    if options.json:
        print(as_json(figures))
    return 0


if __name__ == "__main__":
    _environment.enter("dev")
    raise SystemExit(main())
