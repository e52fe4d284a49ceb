"""Where answers come from: what was said before a prompt does not count."""

from __future__ import annotations

import json
import os

import pytest

from harness.errors import UsageError
from harness.runtime.answers import Ask, FileAnswers, TerminalAnswers, user_name
from harness.runtime.clock import PacedClock

ASK = Ask(number=2, loop="LIC-2", text="LIC-2: do", facts={"setpoint": 0.8})


@pytest.fixture
def file(tmp_path):
    return tmp_path / "answers.txt"


def say(file, text):
    with file.open("a", encoding="utf-8") as out:
        out.write(text)


def texts(answers):
    found = []
    while (answer := answers.poll()) is not None:
        found.append(answer.text)
    return found


def test_lines_appended_to_a_file_answer(file):
    answers = FileAnswers(file)
    answers.ask(ASK)
    assert texts(answers) == []
    say(file, "done\n\n")
    assert texts(answers) == ["done", ""]
    say(file, "no, lo")
    assert texts(answers) == []  # half a line is none
    say(file, "cked\r\n")
    assert texts(answers) == ["no, locked"]
    assert str(file) in answers.how


def test_what_stood_in_the_file_before_the_prompt_does_not_count(file):
    say(file, "done\ndone\n")
    answers = FileAnswers(file)
    answers.ask(ASK)
    assert texts(answers) == []
    say(file, "yes\nyes\n")
    assert answers.poll().text == "yes"
    answers.ask(ASK)
    assert texts(answers) == []


def test_a_file_written_anew_is_read_from_its_start(file):
    say(file, "a long line of an older answer\n")
    answers = FileAnswers(file)
    answers.ask(ASK)
    file.write_text("done\n", encoding="utf-8")
    assert texts(answers) == ["done"]


def test_the_open_prompt_stands_beside_the_file(file):
    prompt = file.with_name("answers.txt.prompt.json")
    prompt.write_text("left over from an earlier run")
    answers = FileAnswers(file)
    assert not prompt.exists()
    answers.ask(ASK)
    assert json.loads(prompt.read_text(encoding="utf-8")) == {
        "number": 2, "loop": "LIC-2", "text": "LIC-2: do", "order": {"setpoint": 0.8},
    }  # fmt: skip
    answers.done()
    assert not prompt.exists()


def test_a_file_that_cannot_be_is_told_of(tmp_path):
    with pytest.raises(UsageError, match="cannot be written"):
        FileAnswers(tmp_path / "no" / "such" / "folder")


def wait_for_line(answers):
    clock = PacedClock()
    for _ in range(500):
        answer = answers.poll()
        if answer is not None:
            return answer
        clock.wait_until(clock.now_ns() + 2_000_000)
    raise AssertionError("no line came")


def test_a_terminal_answers_by_lines_after_the_prompt():
    read, write = os.pipe()
    answers = TerminalAnswers(read)
    answers.ask(ASK)
    assert answers.poll() is None
    os.write(write, b"\n")
    assert wait_for_line(answers).text == ""
    os.write(write, b"too early\nkept")
    assert wait_for_line(answers).text == "too early"
    os.write(write, b" together\r\n")
    answer = wait_for_line(answers)
    assert (answer.text, answer.who) == ("kept together", user_name())
    os.close(write)  # as at the end of a terminal: the thread ends by itself
