"""What the command line changes of a rig and a trial."""

from __future__ import annotations

from pathlib import Path

import pytest

from harness.app.loading import LinkChoice, only_phases, read_rig, read_trial
from harness.errors import ConfigurationError, UsageError

CONFIGS = Path(__file__).parents[3] / "configs"
RIG = CONFIGS / "rigs" / "bench_skid.toml"
TRIAL = CONFIGS / "trials" / "bench.toml"
DATA = Path(__file__).parents[1] / "config" / "data"


def addresses(choice):
    rig, _ = read_rig(RIG, choice)
    return [(link.name, link.host, link.port) for link in rig.links]


def test_without_options_the_file_is_taken_as_it_is():
    assert addresses(None) == [("modbus", "127.0.0.1", 5020), ("opcua", "127.0.0.1", 4840)]
    assert addresses(LinkChoice()) == addresses(None)
    assert read_rig(RIG)[1] == RIG.read_text(encoding="utf-8")


def test_host_and_ports_are_changed():
    choice = LinkChoice(host="::1", modbus_port=0, opcua_port=1234)
    assert addresses(choice) == [("modbus", "::1", 0), ("opcua", "::1", 1234)]


def test_one_link_is_chosen_by_name_or_kind():
    assert [name for name, *_ in addresses(LinkChoice(only="opcua"))] == ["opcua"]
    rig, _ = read_rig(RIG)
    assert {rig.links[0].name} == {name for name, *_ in addresses(LinkChoice(only="modbus"))}


def test_a_link_that_is_not_there_is_refused_with_what_there_is():
    with pytest.raises(UsageError, match=r'bench_skid.*no link "fieldbus".*modbus, opcua'):
        read_rig(RIG, LinkChoice(only="fieldbus"))


def test_a_trial_is_cut_to_phases_in_its_own_order():
    rig, _ = read_rig(RIG)
    trial, _ = read_trial(TRIAL, rig, ("load up", "settle"))
    assert [phase.name for phase in trial.phases] == ["settle", "load up"]
    assert len(only_phases(read_trial(TRIAL, rig)[0], ()).phases) == 5


def test_a_phase_whose_name_has_a_comma_is_found_though_it_was_split():
    rig, _ = read_rig(DATA / "rig.toml")
    trial, _ = read_trial(DATA / "trial.toml", rig)
    for parts in (("settle", "load up", "manual"), ("load up,manual", "settle")):
        cut = only_phases(trial, parts)
        assert [phase.name for phase in cut.phases] == ["settle", "load up, manual"]


def test_a_phase_that_is_not_there_is_refused_with_what_there_is():
    rig, _ = read_rig(RIG)
    with pytest.raises(UsageError, match=r'"bench" has no phase "up"; it has "settle", "setp'):
        read_trial(TRIAL, rig, ("settle", "up"))


@pytest.mark.parametrize(
    ("content", "said"),
    [
        (None, "there is no such rig file"),
        (b"\xff\xfe", "UTF-8"),
        (b"", "rig.toml:1: format: is missing"),
        (b"format = ", "rig.toml:1"),
    ],
)
def test_a_file_that_cannot_be_read_is_told_of(tmp_path, content, said):
    path = tmp_path / "rig.toml"
    if content is not None:
        path.write_bytes(content)
    with pytest.raises(ConfigurationError, match=said):
        read_rig(path)


def test_a_folder_is_no_file(tmp_path):
    with pytest.raises(ConfigurationError, match="is a folder"):
        read_rig(tmp_path)
