"""The port behind which a controller written in Python stands."""

from __future__ import annotations

from typing import Protocol


class Controller(Protocol):
    """A controller that is called at its scans, in the tick's own process."""

    def scan(
        self,
        process_variable: float,
        setpoint: float,
        mode: int,
        manual_output: float,
        bad: bool,
    ) -> float:
        """Execute one scan and return the output.

        Parameters
        ----------
        process_variable, setpoint : float
            As transmitted, and as ordered [fraction of span].
        mode : int
            MANUAL or AUTOMATIC of ``harness.controllers.block`` [-].
        manual_output : float
            Output ordered in manual [-].
        bad : bool
            Whether the quality of the process variable is bad.

        Returns
        -------
        float
            Output [-].
        """
        ...
