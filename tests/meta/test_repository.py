"""The tree holds what it should hold, and speaks of the project alone."""

import fnmatch
import re
from collections.abc import Iterator
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
TOP_LEVEL = {
    "README.md",
    "DEVELOPERS.md",
    "pyproject.toml",
    "harness",
    "plants",
    "tests",
    "configs",
    "scripts",
}

# In pieces, so that this file passes its own test.
FORBIDDEN = re.compile(
    "|".join(
        [
            "trans" + "cript",
            "lec" + "ture",
            "seed " + "document",
            "sub" + "agent",
            "/(wo" + "rk|ro" + "ot|fa" + "rm)/",
            r"/\.lib" + "rary",
        ]
    ),
    re.IGNORECASE,
)


def ignored(name: str) -> bool:
    patterns = (ROOT / ".gitignore").read_text(encoding="utf-8").split()
    return any(fnmatch.fnmatch(name, pattern.rstrip("/")) for pattern in patterns)


def text_files() -> Iterator[Path]:
    for top in sorted(ROOT.iterdir()):
        if top.name == ".git" or ignored(top.name):
            continue
        for path in [top] if top.is_file() else sorted(top.rglob("*")):
            inside = path.relative_to(ROOT).parts
            if path.is_file() and not any(ignored(part) for part in inside):
                yield path


def lines() -> Iterator[tuple[str, str]]:
    for path in text_files():
        data = path.read_bytes()
        if b"\0" in data:
            continue
        for number, line in enumerate(data.decode("utf-8").splitlines(), start=1):
            yield f"{path.relative_to(ROOT).as_posix()}:{number}", line


def test_top_level_holds_nothing_else() -> None:
    present = {
        entry.name
        for entry in ROOT.iterdir()
        if not entry.name.startswith(".") and not ignored(entry.name)
    }
    assert present == TOP_LEVEL


def test_no_word_or_path_from_outside_the_project() -> None:
    found = [f"{place}: {line.strip()}" for place, line in lines() if FORBIDDEN.search(line)]
    assert not found, "\n" + "\n".join(found)


def test_the_words_are_found_where_they_stand() -> None:
    assert FORBIDDEN.search("a Lec" + "ture on tanks")
    assert FORBIDDEN.search("see /ro" + "ot/notes.txt")
    assert not FORBIDDEN.search("the framework/rooted/farming")


def test_constraints_name_versions_only() -> None:
    text = (ROOT / "scripts" / "constraints.txt").read_text(encoding="utf-8")
    wrong = [
        line
        for line in text.splitlines()
        if not line.startswith("#") and not re.fullmatch(r"[A-Za-z0-9._-]+==[0-9][\w.]*", line)
    ]
    assert wrong == []


def test_every_folder_says_what_belongs_in_it() -> None:
    tops = [ROOT / name for name in TOP_LEVEL if (ROOT / name).is_dir()]
    folders = [entry for entry in (ROOT / "harness").iterdir() if entry.is_dir()]
    silent = [
        folder.relative_to(ROOT).as_posix()
        for folder in [*tops, *folders]
        if not ignored(folder.name) and not (folder / "README.md").is_file()
    ]
    assert sorted(silent) == []
