"""Taking up a run: the plant comes back to where it was, and nothing done is lost."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from harness.app.earlier import Earlier, read_earlier
from harness.app.run_files import read_run
from harness.domain.run import Closing, EventKind, RunEnd
from harness.domain.trial import ModelSource, PhaseKind
from harness.engine.engine import Engine
from harness.errors import UsageError
from harness.recording.folder import create_run_folder
from harness.recording.reader import RunFolder
from harness.recording.writer import Recorder
from harness.runtime.progress import DonePhase, Progress
from harness.runtime.session import Session
from harness.runtime.trial_script import trial_script


def earlier_of(data, tick):
    names = [column.name for column in data.header.columns]
    return Earlier(
        data=data,
        tick=tick,
        rows=np.column_stack([data.trace[name][:tick] for name in names]),
        lateness=data.trace["lateness"][:tick],
        progress=Progress(run="old"),
    )


class TestPlant:
    """The state is no part of the record; it follows from the outputs and the noise."""

    @pytest.fixture
    def data(self, runs):
        return runs.external("short")

    def test_it_goes_on_exactly_as_it_did(self, data):
        tick, more = data.rows // 2, 200
        engine = Engine(data.rig, built_in=False)
        earlier_of(data, tick).put_back(engine)
        assert engine.tick == tick
        names = [column.name for column in engine.columns]
        for k in range(tick, tick + more):
            for valve in data.rig.valves:
                engine.set_output(valve.tag, float(data.trace[f"{valve.tag}.command"][k]))
            row = engine.record(1)[0]
            for name in ("LT-101.true", "LT-102.true", "LT-102.value", "FT-101.value"):
                assert row[names.index(name)] == data.trace[name][k]

    def test_a_record_that_this_plant_does_not_make_is_refused(self, data):
        trace = dict(data.trace)
        trace["LT-102.true"] = trace["LT-102.true"] + 1e-6
        other = dataclasses.replace(data, trace=trace)
        with pytest.raises(UsageError, match="the plant comes 1e-06 away"):
            earlier_of(other, 400).put_back(Engine(data.rig, built_in=False))


def test_steps_done_in_manual_are_identified_from_as_if_nothing_had_happened(runs):
    whole = runs.builtin()
    rig, trial = whole.rig, whole.trial
    manual = tuple(phase for phase in trial.phases if phase.mode.value == "manual")
    first = next(phase for phase in trial.phases if phase.kind is PhaseKind.SETPOINT_STEP)
    recorder = runs.Recorder()
    session = Session(Engine(rig), recorder, None)
    session.run(
        trial_script(
            session, dataclasses.replace(trial, phases=manual, models=ModelSource.LINEARISED)
        )
    )

    rows = np.concatenate(recorder.blocks)
    events = {
        kind: {e.subject: e.tick for e in recorder.events if e.kind is kind}
        for kind in EventKind
    }
    done = {}
    for phase in manual:
        start = events[EventKind.PHASE_STARTED][phase.name]
        end = events[EventKind.PHASE_ENDED][phase.name]
        done[phase.name] = DonePhase(
            lead_in=rows[max(0, start - 30) : start], rows=rows[start:end], end=end
        )
    recorder.events.clear()
    rest = dataclasses.replace(trial, phases=(*manual, first))
    session.run(trial_script(session, rest, progress=Progress(run="old", phases=done)))

    started = [e.subject for e in recorder.events if e.kind is EventKind.PHASE_STARTED]
    assert started == [first.name]
    (models,) = (e.data for e in recorder.events if e.kind is EventKind.MODELS)
    (wanted,) = (e.data for e in whole.events if e.kind is EventKind.MODELS)
    assert models == wanted


class TestRefusals:
    """What cannot be taken up, and why."""

    @pytest.fixture
    def folder(self, runs, tmp_path):
        def make(*, end=RunEnd.INVALID, controller="external over modbus"):
            data = runs.external("short")
            text = {
                name: (runs.configs / f"{name}s" / file).read_text(encoding="utf-8")
                for name, file in (("rig", "make_up_skid.toml"), ("trial", "short.toml"))
            }
            header = dataclasses.replace(
                data.header,
                controller=controller,
                rig_text=text["rig"],
                trial_text=text["trial"],
            )
            folder = create_run_folder(tmp_path, header)
            with Recorder.create(folder, header, lambda: 0) as recorder:
                earlier_of(data, data.rows).write(recorder)
                recorder.close(
                    Closing(
                        end=end, reason="a wrong key", last_tick=data.rows - 1, rows=data.rows
                    )
                )
            return folder

        return make

    def test_a_complete_run(self, folder):
        with pytest.raises(UsageError, match="is complete; there is nothing to take up"):
            read_earlier(folder(end=RunEnd.COMPLETE))

    def test_a_run_of_the_built_in_controller(self, folder):
        with pytest.raises(UsageError, match="built-in one, which nobody can type wrong"):
            read_earlier(folder(controller="builtin"))

    def test_one_that_can_be_is_read_up_to_its_last_completed_phase(self, folder):
        made = folder()
        earlier = read_earlier(made)
        data = read_run(made)
        assert list(earlier.progress.phases) == [phase.name for phase in data.trial.phases]
        assert earlier.events[-1].kind is EventKind.PHASE_ENDED
        assert earlier.tick == earlier.events[-1].tick
        assert earlier.progress.settings["LIC-102"].gain > 0.0
        assert earlier.progress.models["LIC-102"].output.gain > 0.0
        assert len(earlier.rows) == earlier.tick <= len(RunFolder.open(made).trace()["tick"])
