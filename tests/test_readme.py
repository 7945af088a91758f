"""The README runs: its commands print what it shows, its Python works as written."""

import re
import shlex
import tomllib
from pathlib import Path

import pytest
from click.testing import CliRunner
from readme_reference import commands, options, with_reference

from trajcage.cli import main
from trajcage.run.configuration import read_configuration

ROOT = Path(__file__).parents[1]
TEXT = (ROOT / "README.md").read_text(encoding="utf-8")


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


def check_session(block):
    """Commands print what is shown; ``...`` stands for the rest of the output."""
    for step in re.split(r"^\$ ", block, flags=re.MULTILINE)[1:]:
        command, _, shown = step.partition("\n")
        program, *words = shlex.split(command)
        assert program == "trajcage"
        done = CliRunner().invoke(main, words)
        assert done.exit_code == 0, done.output
        output = re.sub(r"^compiling .*\n", "", done.output)  # on a new machine
        timeless = [re.sub(r"\(\d+\.\d s\)", "", t) for t in (shown, output)]
        wanted, found = (text.split() for text in timeless)
        if wanted[-1:] == ["..."]:
            wanted = wanted[:-1]
            found = found[: len(wanted)]
        pairs = zip(wanted, found, strict=True)
        assert [(a, b) for a, b in pairs if not same(a, b)] == [], command


def test_it_runs_from_top_to_bottom(here):
    blocks = re.findall(r"^```(\w+)\n(.*?)^```$", TEXT, re.MULTILINE | re.DOTALL)
    assert {language for language, _ in blocks} == {"console", "python", "toml"}
    for language, block in blocks:
        if language == "console":
            check_session(block)
        elif language == "toml":
            Path("run.toml").write_text(block, encoding="utf-8")
            assert read_configuration("run.toml") == tomllib.loads(block)
        else:
            exec(compile(block, "README.md", "exec"), {})


def test_named_commands_exist():
    assert set(re.findall(r"`trajcage (\w+)", TEXT)) <= set(commands())


def test_the_reference_is_fresh():
    """Every command, option and dataset stands there; scripts/readme_reference.py does it."""
    assert with_reference(TEXT) == TEXT


def test_every_option_of_every_command_is_named_and_every_named_option_exists():
    """Walked here by itself, so that the script above cannot leave one out."""
    for name, command in commands().items():
        part = TEXT.partition(f"### trajcage {name}\n")[2].partition("\n###")[0]
        for option in options(command):
            if option.name not in {"verbose", "quiet"}:
                assert all(word in part for word in option.opts), (name, option.name)
    known = {word for c in commands().values() for o in options(c) for word in o.opts}
    known |= {"--help", "--version", "-h"}
    elsewhere = TEXT.replace("dump_modify", "")
    named = set(re.findall(r"(?<![\w-])--[a-z][a-z-]*", elsewhere))
    assert named <= known, named - known
