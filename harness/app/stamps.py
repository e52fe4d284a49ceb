"""What identifies a run: its time stamp, its id and the versions at work."""

from __future__ import annotations

import platform
import secrets
from datetime import UTC, datetime
from importlib.metadata import version

_LIBRARIES = ("numpy", "scipy", "numba", "asyncua", "pymodbus")


def utc_now() -> str:
    """Return the present time as an ISO 8601 label; it never steers anything."""
    return datetime.now(UTC).strftime("%Y-%m-%dT%H:%M:%SZ")  # noqa: TID251  a label of the run


def new_run_id() -> str:
    """Return a new run id: eight hexadecimal digits."""
    return secrets.token_hex(4)


def versions() -> dict[str, str]:
    """Return the versions of the program, of Python and of the libraries that matter."""
    found = {"dryrig": version("dryrig"), "python": platform.python_version()}
    found |= {name: version(name) for name in _LIBRARIES}
    return found | {"system": f"{platform.system()} {platform.machine()}"}
