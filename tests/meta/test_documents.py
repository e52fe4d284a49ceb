"""The README says what is so: its register map, its files, its exit codes."""

import re
from pathlib import Path

from harness.config.load import load_rig
from harness.domain.points import points_of
from harness.domain.rig import ModbusServerLink
from harness.errors import ExitCode
from harness.links.register_map import describe_map

ROOT = Path(__file__).resolve().parents[2]
README = (ROOT / "README.md").read_text(encoding="utf-8")
DOCUMENTS = [ROOT / "README.md", ROOT / "DEVELOPERS.md", *ROOT.glob("*/README.md")]


def section(title: str) -> str:
    return README.split(f"\n## {title}\n", 1)[1].split("\n## ", 1)[0]


def rows(text: str) -> list[list[str]]:
    """Return the cells of a table's body."""
    lines = [line for line in text.splitlines() if line.startswith("|")]
    return [[cell.strip() for cell in line.strip("|").split("|")] for line in lines[2:]]


def register_map(rig_file: str) -> list[list[str]]:
    rig, _ = load_rig(ROOT / "configs" / "rigs" / rig_file)
    (link,) = (link for link in rig.links if isinstance(link, ModbusServerLink))
    return [
        [
            str(row.address), str(row.address_from_one), f"`{row.point}`",
            f"{row.encoding} {row.word_order}".strip(), row.scaling, row.unit, row.functions,
            row.description,
        ]
        for row in describe_map(points_of(rig, external=True), link.items)
    ]  # fmt: skip


def test_the_register_map_is_that_of_the_demo_rig() -> None:
    assert rows(section("Register map")) == register_map("make_up_skid.toml")


def test_the_bench_rig_has_the_same_addresses_and_types() -> None:
    # Its ranges may be others, since its tanks are smaller.
    found = [row[:4] for row in register_map("bench_skid.toml")]
    assert found == [row[:4] for row in rows(section("Register map"))]


def test_files_that_documents_name_are_there() -> None:
    named = {
        (document, path)
        for document in DOCUMENTS
        for path in re.findall(
            r"\b(?:configs|harness|plants|scripts|tests)/[\w./-]+\.\w+",
            document.read_text(encoding="utf-8"),
        )
    }
    assert named
    missing = [
        f"{document.relative_to(ROOT).as_posix()}: {path}"
        for document, path in sorted(named)
        if not (ROOT / path).is_file()
    ]
    assert missing == []


def test_every_exit_code_is_told() -> None:
    told = set(map(int, re.findall(r"\b(\d+) (?:pass|fail|wrong|invalid|interrupted)", README)))
    assert told == {int(code) for code in ExitCode}


def test_every_caution_stands_in_the_readme() -> None:
    cautions = section("Cautions")
    for words in (
        "isolated from the field",
        "no evidence for a safety function",
        "Local codes",
    ):
        assert words in cautions
