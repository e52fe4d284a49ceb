"""A live session: how it ends, what it leaves, and what it says before it begins."""

from __future__ import annotations

import json
import os
import signal
import sys

import pytest

from harness.domain.run import EventKind, RunEnd
from harness.recording.reader import RunFolder

pytestmark = [pytest.mark.wire, pytest.mark.slow, pytest.mark.timeout(200)]

ANY_PORT = ("--link", "modbus", "--modbus-port", 0)


def serve(bench, name, *arguments, **how):
    where = ("--out", bench.folder / name, "--pace", 20)
    return bench.start(name, "serve", bench.rig, *ANY_PORT, *where, *arguments, **how)


def test_it_serves_for_its_time_and_gives_its_last_state(bench):
    session = serve(bench, "timed", "--for", 1, "--builtin", "--json")
    assert session.ended() == 0
    document = json.loads(session.said)
    assert document["tick"] == 80  # 1 s at pace 20, ticks of 0.25 s
    assert document["time"] == 20.0
    level = document["values"]["LT-102"]
    assert (level["unit"], level["quality"], level["written_by"]) == ("m", "good", None)
    assert level["value"] == pytest.approx(0.24, abs=0.01)  # where the rig file says it starts
    assert 4.0 < level["current_ma"] < 20.0
    assert session.complained.count("Caution: ") == 3
    assert "must be isolated from the field" in session.complained
    assert session.complained.count("listening on 127.0.0.1:") == 1
    run = RunFolder.open(bench.run_folder("timed"))
    run.verify()
    assert (run.closing.end, run.closing.rows) == (RunEnd.COMPLETE, 80)
    assert run.header.controller == "builtin"


@pytest.mark.skipif(sys.platform == "win32", reason="sends signals")
def test_ctrl_c_is_the_end_of_it_unless_a_time_was_set(bench):
    """The one without a set time has a terminal, which is left as it was."""
    pty = pytest.importorskip("pty")
    ours, theirs = pty.openpty()
    limited = serve(bench, "limited", "--for", 600)
    unlimited = serve(bench, "unlimited", stdout=theirs)
    os.close(theirs)
    shown = read_until(ours, b"LT-102")
    limited.wait_for("listening on")
    while not list(bench.folder.glob("limited/*/trace.sqlite")):
        bench.pause()
    bench.pause(0.5)
    for session, code in ((unlimited, 0), (limited, 130)):
        os.killpg(session.process.pid, signal.SIGINT)
        if session is unlimited:
            shown += read_until(ours, None)
            os.close(ours)
        assert session.ended() == code
        assert session.left_nobody()
        assert "Traceback" not in session.said + session.complained
    hidden, back = b"\x1b[?25l", b"\x1b[?25h"
    assert hidden in shown
    assert back in shown.rpartition(hidden)[2]
    for name, end in (("unlimited", RunEnd.COMPLETE), ("limited", RunEnd.INTERRUPTED)):
        run = RunFolder.open(bench.run_folder(name))
        run.verify()
        assert run.closing.end is end
        assert run.closing.rows > 0
        assert [event.text for event in run.events() if event.kind is EventKind.NOTE] == [
            "ended by the user"
        ]


def read_until(terminal, text):
    """Read a terminal until it has shown a text, or to its end."""
    shown = b""
    while text is None or text not in shown:
        try:
            part = os.read(terminal, 65536)
        except OSError:  # so Linux tells that nobody has the other side any more
            part = b""
        if not part:
            break
        shown += part
    return shown
