"""What a trial asks of the session that carries it out."""

from __future__ import annotations

from collections.abc import Callable, Generator
from dataclasses import dataclass
from typing import Any

from harness.errors import UsageError


@dataclass(frozen=True, slots=True, kw_only=True)
class Advance:
    """Let plant time pass; answered with the rows.

    Parameters
    ----------
    ticks : int
        How long [ticks].
    """

    ticks: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Compute:
    """Have something computed while the plant goes on; answered with the result.

    Parameters
    ----------
    function : callable
        A function of a module, so that another process can call it.
    arguments : tuple
        Its arguments.
    """

    function: Callable[..., Any]
    arguments: tuple[Any, ...]


class NothingToCompute:
    """Stands where a computer is asked for and no script will ask for a computation."""

    def begin(self, request: Compute) -> None:
        """Refuse a computation.

        Parameters
        ----------
        request : Compute
            Function and arguments.

        Raises
        ------
        UsageError
            Always.
        """
        raise UsageError(
            f"{request.function}: this session has nobody to compute it; give it a computer"
        )

    def result(self) -> tuple[bool, Any]:
        """Return that nothing is done."""
        return False, None


Request = Advance | Compute
Script = Generator[Request, Any, None]
