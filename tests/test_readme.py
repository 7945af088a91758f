"""The README runs: its commands print what it shows, its Python works as written."""

import re
import shlex
from pathlib import Path

import pytest
from click.testing import CliRunner

from trajcage.cli import main

ROOT = Path(__file__).parents[1]
TEXT = (ROOT / "README.md").read_text(encoding="utf-8")


def blocks(language):
    return re.findall(rf"^```{language}\n(.*?)^```$", TEXT, re.MULTILINE | re.DOTALL)


@pytest.fixture
def here(tmp_path, monkeypatch):
    (tmp_path / "sample-data").symlink_to(ROOT / "sample-data")
    monkeypatch.chdir(tmp_path)


def same(shown, found):
    """Word by word; numbers may differ in digits that depend on the machine."""
    if shown == found:
        return True
    try:
        return float(found) == pytest.approx(float(shown), rel=0.02, abs=0.01)
    except ValueError:
        return False


def test_commands_print_what_is_shown(here):
    for block in blocks("console"):
        steps = re.split(r"^\$ ", block, flags=re.MULTILINE)[1:]
        for step in steps:
            command, _, shown = step.partition("\n")
            program, *words = shlex.split(command)
            assert program == "trajcage"
            done = CliRunner().invoke(main, words)
            assert done.exit_code == 0, done.output
            timeless = [re.sub(r"\(\d+\.\d s\)", "", t) for t in (shown, done.output)]
            wanted, found = (text.split() for text in timeless)
            if wanted[-1] == "...":  # the rest is left out
                wanted = wanted[:-1]
                found = found[: len(wanted)]
            pairs = zip(wanted, found, strict=True)
            assert [(a, b) for a, b in pairs if not same(a, b)] == [], command


def test_python_works_as_written(here):
    for block in blocks("python"):
        exec(compile(block, "README.md", "exec"), {})


def test_named_commands_exist():
    context = main.make_context(
        "trajcage", ["inspect", "--help"], resilient_parsing=True
    )
    known = set(main.list_commands(context))
    assert set(re.findall(r"`trajcage (\w+)", TEXT)) - {"measure"} <= known
