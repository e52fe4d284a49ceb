"""Where a process to tune comes from: a rig, a fit, or numbers typed in."""

from __future__ import annotations

import json
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

from harness.domain.signals import Range
from harness.errors import UsageError
from harness.tuning.entered import Spans
from harness.tuning.process import ProcessModel, process_of

if TYPE_CHECKING:
    from pathlib import Path

_FRACTIONS = "fraction of PV range per fraction of output range"


@dataclass(frozen=True, slots=True, kw_only=True)
class TypedModel:
    """Figures of a process, as typed in.

    Parameters
    ----------
    gain : float or None
        Gain; with ``integrating`` per second [as ``engineering`` says].
    time_constants : tuple of float
        Lags [s].
    dead_time : float
        Dead time [s].
    inverse_response : float
        Time of a zero on the wrong side [s].
    integrating : bool
        Whether the process integrates.
    engineering : bool
        Whether the gain is in PV units per output unit.
    """

    gain: float | None = None
    time_constants: tuple[float, ...] = ()
    dead_time: float = 0.0
    inverse_response: float = 0.0
    integrating: bool = False
    engineering: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class TuningSource:
    """A process to tune, with what is known around it.

    Parameters
    ----------
    name : str
        What it is, for people.
    process : ProcessModel
        Process; its gain is in fractions unless ``gain_unit`` says otherwise.
    gain_unit : str
        Unit of the gain.
    spans : Spans
        Ranges, as far as they are known.
    scan, output_delay : float
        What the rig says of the block; 0 where nothing is said [s].
    output : float or None
        Output at the operating point [fraction of output].
    output_low, output_high : float
        Limits of the output [fraction of output].
    stroke_time : float
        Travel time of the valve; 0 when it is not known [s].
    notes : tuple of str
        What the reader should know of the model.
    """

    name: str
    process: ProcessModel
    gain_unit: str = _FRACTIONS
    spans: Spans = field(default_factory=Spans)
    scan: float = 0.0
    output_delay: float = 0.0
    output: float | None = None
    output_low: float = 0.0
    output_high: float = 1.0
    stroke_time: float = 0.0
    notes: tuple[str, ...] = ()

    @property
    def in_fractions(self) -> bool:
        """Return whether the gain is a fraction of the ranges."""
        return self.gain_unit == _FRACTIONS


def typed_source(typed: TypedModel, spans: Spans) -> TuningSource:
    """Return the source made of typed-in figures.

    Parameters
    ----------
    typed : TypedModel
        Figures.
    spans : Spans
        Ranges.

    Raises
    ------
    UsageError
        When the gain is missing, or ranges that its unit needs.
    """
    if typed.gain is None:
        raise UsageError(
            "tune: no process; give a rig file, the JSON file of a fit, or --gain with "
            "--time-constant (or --integrating) and --dead-time"
        )
    gain = typed.gain
    if typed.engineering:
        gain *= _to_fractions(spans)
    inverse = typed.inverse_response
    return TuningSource(
        name="typed-in figures",
        process=ProcessModel(
            gain=gain,
            time_constants=typed.time_constants,
            dead_time=typed.dead_time,
            integrating=typed.integrating,
            numerator_times=(-inverse,) if inverse else (),
        ),
        spans=spans,
    )


def fit_source(path: Path, kind: str | None, spans: Spans) -> TuningSource:
    """Return the source made of a document of ``dryrig fit --json``.

    Parameters
    ----------
    path : Path
        The document.
    kind : str or None
        Kind of the model to take; None takes the best.
    spans : Spans
        Ranges of the command line, which go before those of the fit.

    Raises
    ------
    UsageError
        When the file is no such document, or has no such model.
    """
    document = _document(path)
    models = document.get("models")
    if not isinstance(models, list) or not models:
        raise UsageError(f'{path}: no "models" in it; give what dryrig fit --json wrote')
    chosen = [model for model in models if kind is None or model.get("kind") == kind]
    if not chosen:
        kinds = ", ".join(str(model.get("kind")) for model in models)
        raise UsageError(f'{path}: no model of kind "{kind}"; it has {kinds}')
    model = chosen[0]
    try:
        process = ProcessModel(
            gain=float(model["gain"]),
            time_constants=tuple(float(value) for value in model["time_constants"]),
            dead_time=float(model["dead_time"]),
            integrating=model["kind"] == "integrating",
            numerator_times=tuple(float(value) for value in model.get("numerator_times", ())),
        )
    except (KeyError, TypeError, ValueError) as error:
        raise UsageError(
            f"{path}: the model {model.get('kind')} is not complete ({error!r}); give what "
            "dryrig fit --json wrote"
        ) from error
    known = Spans(
        pv=spans.pv or _range(document.get("output_range")),
        output=spans.output or _range(document.get("input_range")),
        pv_counts=spans.pv_counts,
        output_counts=spans.output_counts,
    )
    return _scaled(
        TuningSource(
            name=f"{path.name}, {model['kind']}",
            process=process,
            gain_unit=str(document.get("gain_unit", _FRACTIONS)),
            spans=known,
            notes=tuple(str(item) for item in document.get("findings", ())),
        )
    )


def rig_source(path: Path, loop_tag: str | None, spans: Spans) -> TuningSource:
    """Return the source made of a rig: the linearised output path of one of its loops.

    Parameters
    ----------
    path : Path
        Rig file.
    loop_tag : str or None
        Tag of the loop; None takes the first.
    spans : Spans
        Of the command line: the counts over the ranges; the ranges are the rig's own.

    Raises
    ------
    ConfigurationError
        With every problem of the file.
    UsageError
        When there is no such loop.
    ModelError
        When there is no steady state, or the loop is not linearised.
    """
    # These bring the plant and its compiler with them.
    from harness.analysis.loop_models import linearised_models  # noqa: PLC0415
    from harness.app.loading import read_rig  # noqa: PLC0415
    from harness.app.trial import say_compiling  # noqa: PLC0415
    from harness.domain.points import shown_range  # noqa: PLC0415
    from harness.engine.engine import Engine  # noqa: PLC0415

    rig, _ = read_rig(path)
    tags = [loop.tag for loop in rig.loops]
    if not tags or (loop_tag is not None and loop_tag not in tags):
        raise UsageError(
            f'{path}: no loop "{loop_tag or ""}" in this rig; it has {", ".join(tags) or "none"}'
        )
    loop = rig.loop(loop_tag or tags[0])
    say_compiling()
    models = linearised_models(Engine(rig), loop)
    valve = rig.valve(loop.output)
    return TuningSource(
        name=f"rig {rig.name}, loop {loop.tag}",
        process=process_of(models.output),
        spans=Spans(
            pv=shown_range(rig.transmitter(loop.process_variable)),
            output=Range(lower=0.0, upper=100.0, unit="%"),
            pv_counts=spans.pv_counts,
            output_counts=spans.output_counts,
        ),
        scan=loop.scan,
        output_delay=loop.output_delay * rig.tick,
        output=valve.initial_output,
        output_low=loop.output_low,
        output_high=loop.output_high,
        stroke_time=valve.stroke_time,
        notes=(
            f"The plant is linearised with {loop.output} at {100 * valve.initial_output:g} %, and holds "
            "near that operating point only; lags of valve and transmitter are counted as dead time.",
        ),
    )


def _document(path: Path) -> dict[str, Any]:
    try:
        found = json.loads(path.read_text(encoding="utf-8-sig"))
    except OSError as error:
        raise UsageError(f"{path}: cannot be read ({error.strerror})") from error
    except (UnicodeDecodeError, json.JSONDecodeError) as error:
        raise UsageError(f"{path}: is no JSON document ({error})") from error
    if not isinstance(found, dict):
        raise UsageError(f"{path}: is no document of dryrig fit --json, which is an object")
    return found


def _range(value: object) -> Range | None:
    if not isinstance(value, dict):
        return None
    try:
        return Range(
            lower=float(value["low"]), upper=float(value["high"]), unit=str(value["unit"])
        )
    except (KeyError, TypeError, ValueError):
        return None


def _scaled(source: TuningSource) -> TuningSource:
    """Bring a gain in the data's units to fractions, where the ranges are known."""
    spans = source.spans
    if source.in_fractions or spans.pv is None or spans.output is None:
        return source
    process = source.process
    return TuningSource(
        name=source.name,
        process=ProcessModel(
            gain=process.gain * _to_fractions(spans),
            time_constants=process.time_constants,
            dead_time=process.dead_time,
            integrating=process.integrating,
            numerator_times=process.numerator_times,
        ),
        spans=spans,
        notes=source.notes,
    )


def _to_fractions(spans: Spans) -> float:
    if spans.pv is None or spans.output is None:
        raise UsageError(
            "gain in engineering units: the ranges are not known; give --output-range LOW HIGH of "
            "the process variable and --input-range LOW HIGH of the controller output"
        )
    return spans.output.span / spans.pv.span
