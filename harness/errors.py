"""The exceptions of the harness; the type says whose fault it is and what the exit code will be."""

from __future__ import annotations

from enum import IntEnum


class ExitCode(IntEnum):
    """What the command returns to its caller."""

    PASS = 0
    FAIL = 1
    USAGE = 2
    INVALID = 3
    INTERRUPTED = 130


class DryrigError(Exception):
    """Base of every error that a person is meant to read.

    The message names the subject, the actual value, the rule, the place and the fix.
    """

    exit_code: ExitCode = ExitCode.USAGE


class UsageError(DryrigError):
    """The command, or a call, asks for something that cannot be done as asked."""


class ConfigurationError(DryrigError):
    """A configuration has one or more problems; all of them are listed.

    Parameters
    ----------
    problems : tuple of str
        One line each, as ``file:line: path: what, the value, the rule``.
    """

    def __init__(self, problems: tuple[str, ...]) -> None:
        super().__init__("\n".join(problems))
        self.problems = problems


class LinkError(DryrigError):
    """A link could not be opened or kept on this side (port taken, bad map)."""


class PeerError(DryrigError):
    """The other end of a link sent something it should not have; it costs one connection."""

    exit_code = ExitCode.INVALID


class RecordError(DryrigError):
    """The record could not be written or read."""

    exit_code = ExitCode.INVALID


class InvalidRunError(DryrigError):
    """The run cannot be judged: never steady, late, link lost, controller gone."""

    exit_code = ExitCode.INVALID


class DataError(DryrigError):
    """The data do not support what was asked of them (too little movement, no steady end)."""

    exit_code = ExitCode.INVALID


class ModelError(DryrigError):
    """A model or plant does not allow what was asked (no steady state, unstable, no reduction)."""
