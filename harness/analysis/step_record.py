"""The record of a path's steps in manual, from which its model is fitted."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

LEAD_IN = 30  # rows before a step that a fit gets to see the start from [ticks]


class StepRecord:
    """Input and process variable over the steps of one path, as if there had been no others.

    Phases of another path, or in automatic, may lie between two steps and leave the process
    variable, or the input itself, elsewhere. A step's rows are therefore moved to where the
    record had got to: the fit needs deviations alone.
    """

    def __init__(self) -> None:
        self._inputs: list[Floats] = []
        self._outputs: list[Floats] = []
        self._end: int | None = None

    def __bool__(self) -> bool:
        return bool(self._inputs)

    @property
    def inputs(self) -> Floats:
        """Return the input at each row [fraction of output]."""
        return np.concatenate(self._inputs)

    @property
    def outputs(self) -> Floats:
        """Return the process variable at each row [fraction of span]."""
        return np.concatenate(self._outputs)

    def add(self, end: int, inputs: Floats, outputs: Floats, lead_in: int) -> None:
        """Add the rows of a step with the steady rows before it.

        Parameters
        ----------
        end : int
            First tick after the rows [ticks].
        inputs : ndarray, shape (n,)
            Input [fraction of output].
        outputs : ndarray, shape (n,)
            Process variable [fraction of span].
        lead_in : int
            How many of the rows lie before the step [ticks].
        """
        start = end - len(inputs) + lead_in
        if self._end is None:
            self._inputs.append(inputs)
            self._outputs.append(outputs)
        else:
            moved = np.zeros(2)
            if start != self._end and lead_in:
                kept = (self._inputs[-1][-1:], self._outputs[-1][-LEAD_IN:])
                before = (inputs[lead_in - 1 : lead_in], outputs[:lead_in])
                moved = np.array(
                    [k.mean() - b.mean() for k, b in zip(kept, before, strict=True)]
                )
            self._inputs.append(inputs[lead_in:] + moved[0])
            self._outputs.append(outputs[lead_in:] + moved[1])
        self._end = end
