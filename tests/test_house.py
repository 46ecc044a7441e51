"""The house is in order: what stands at the top, and every source that the code names is listed."""

from __future__ import annotations

import re
import shutil
import subprocess
import tomllib
from pathlib import Path

import pytest

TOP = Path(__file__).parents[1]
FIXED = {"README.md", "DEVELOPERS.md", "pyproject.toml", "LICENSE", "preview", "tests", "demo_audio"}
KEY = re.compile(r"\[([A-Z][A-Za-z]+(?:\d{4}| \d{3,5}))[\],]")


def test_the_top_level_holds_the_fixed_set_and_dot_files() -> None:
    if shutil.which("git") is None or not (TOP / ".git").exists():
        pytest.skip("not a git checkout: what is tracked cannot be told from what was built")
    listed = subprocess.run(
        ["git", "-c", f"safe.directory={TOP}", "ls-files"],
        cwd=TOP,
        capture_output=True,
        text=True,
        check=True,
    )
    top = {name.split("/")[0] for name in listed.stdout.splitlines()}
    assert {name for name in top if not name.startswith(".")} == FIXED


def test_every_source_named_in_the_code_is_in_the_list_of_sources() -> None:
    sources = (TOP / "DEVELOPERS.md").read_text("utf-8").split("## Sources")[1]
    listed = set(KEY.findall(sources))
    named = {key for path in (TOP / "preview").rglob("*.py") for key in KEY.findall(path.read_text("utf-8"))}
    assert len(named) >= 6
    assert named <= listed


def test_every_published_row_names_its_source_and_how_it_was_found() -> None:
    files = sorted((TOP / "tests" / "published").glob("*.toml"))
    assert files
    for path in files:
        tables = tomllib.loads(path.read_text("utf-8")).values()
        rows = [row for table in tables for row in (table if isinstance(table, list) else [table])]
        assert rows, path.name
        for row in rows:
            assert row.get("source"), f"{path.name}: {row}"
            assert row.get("found") in ("read", "memory"), f"{path.name}: {row}"


def test_every_command_in_the_readme_is_a_command() -> None:
    from preview.cli import _parser

    readme = (TOP / "README.md").read_text("utf-8")
    named = set(re.findall(r"preview (listen|render|check|response|stages|opamps|devices|[a-z]+) ", readme))
    commands = next(a for a in _parser()._actions if getattr(a, "choices", None)).choices
    assert {"listen", "render", "check", "response", "stages"} <= named
    assert {n for n in named if n in ("noise", "sheet")} == set()
    assert set(commands or ()) >= {"listen", "render", "check", "response", "stages", "opamps", "devices"}
