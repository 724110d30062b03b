"""The map for developers, and the commands that pages name, are true."""

from __future__ import annotations

import re

import pytest

from tests.docs.fences import ROOT, pages

MAP = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
FOLDERS = ("kinetics_db", "api", "workers", "tests", "docs")
MADE_BY_THE_PROGRAM = {"var/", "var/demo/"}


def paths_in_text() -> set[str]:
    """Files and folders in backticks: whatever has a slash, and plain names of modules."""
    named = set(re.findall(r"`([\w.]+(?:/[\w.]+)*(?:/|\.py))`", MAP))
    return named - MADE_BY_THE_PROGRAM


def paths_in_tree() -> set[str]:
    """Paths of the drawn tree, each below the folder that it is drawn under."""
    tree = MAP.split("```\n", 2)[1]
    found: set[str] = set()
    folders: dict[int, str] = {}
    for line in tree.splitlines():
        indent = len(line) - len(line.lstrip())
        names = re.split(r"\s{2,}", line.strip())[0].split()
        above = "".join(folders[level] for level in sorted(folders) if level < indent)
        for name in names:
            if re.fullmatch(r"[\w./-]+(?:\.py|/)|Makefile|[\w.-]+\.(?:toml|lock)", name):
                found.add(above + name)
        folders = {level: folder for level, folder in folders.items() if level < indent}
        if names and names[0].endswith("/"):
            folders[indent] = names[0]
    return found


def test_every_path_of_the_tree_exists() -> None:
    tree = paths_in_tree()
    assert {"kinetics_db/engine/units.py", "kinetics_db/web/views/", "api/base.py", "tests/access/"} <= tree
    assert [path for path in sorted(tree) if not (ROOT / path).exists()] == []


def test_every_domain_and_every_folder_of_tests_is_on_the_map() -> None:
    tree = paths_in_tree()
    domains = {path.parent.name for path in (ROOT / "kinetics_db").glob("*/__init__.py")}
    assert {name for name in domains if f"kinetics_db/{name}/" not in tree} == set()


@pytest.mark.parametrize("path", sorted(paths_in_text()))
def test_a_path_that_the_rules_name_exists(path: str) -> None:
    """By its end, as in 'runs/query.py'."""
    name = path.rstrip("/").rpartition("/")[2]
    found = [one for folder in FOLDERS for one in (ROOT / folder).rglob(name)]
    assert any(f"{one.relative_to(ROOT).as_posix()}/".endswith(f"{path.rstrip('/')}/") for one in found)


def test_every_make_command_that_a_page_names_is_there() -> None:
    targets = set(re.findall(r"^([a-z][a-z-]*):", (ROOT / "Makefile").read_text("utf-8"), re.MULTILINE))
    named = {
        command
        for page in pages()
        for command in re.findall(r"(?:`|^ {4})make ([a-z][a-z-]*)", page.read_text("utf-8"), re.MULTILINE)
    }
    assert {"demo", "serve", "test", "help"} <= named <= targets


def test_every_decision_is_listed_in_its_order() -> None:
    folder = ROOT / "docs" / "decisions"
    listed = re.findall(
        r"^(\d+)\. \[.+\]\((\d{4}-.+\.md)\)$", (folder / "README.md").read_text("utf-8"), re.M
    )
    assert [name for _, name in listed] == sorted(path.name for path in folder.glob("0*.md"))
    assert [int(number) for number, _ in listed] == [int(name[:4]) for _, name in listed]
    for number, name in listed:
        assert (folder / name).read_text("utf-8").startswith(f"# {number}. ")
