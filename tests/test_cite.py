"""Citations, versions and completion."""

import os
import re
import subprocess
import sys
from pathlib import Path

import pytest
import run_scenario as scenario
import yaml
from test_cli import call

import trajcage
from trajcage.lattices import EQUATIONS as EQUATIONS_OF_STATE
from trajcage.lattices import disk_mixture, sphere_mixture
from trajcage.references import BUILT_ON, EQUATIONS, METHODS, PROGRAM
from trajcage.run import RunSettings

ROOT = Path(__file__).parents[1]


def test_the_citation_file_says_the_same():
    found = yaml.safe_load((ROOT / "CITATION.cff").read_text(encoding="utf-8"))
    assert found["version"] == trajcage.__version__
    assert found["title"] == PROGRAM.title
    assert found["license"] == PROGRAM.license
    assert [author["name"] for author in found["authors"]] == [PROGRAM.author]
    for article, entry in zip(BUILT_ON, found["references"], strict=True):
        names = [f"{a['family-names']}, {a['given-names']}" for a in entry["authors"]]
        assert article.authors == tuple(names)
        for key in ("title", "journal", "year", "doi"):
            assert getattr(article, key) == entry[key]
        assert article.volume == str(entry["volume"])
        assert article.page == str(entry["start"])


def test_every_equation_of_state_can_be_cited():
    mixtures = [sphere_mixture([0.5, 0.7]), disk_mixture([0.5, 0.7])]
    for equation in (*EQUATIONS_OF_STATE.values(), *mixtures):
        if equation.source.startswith("free "):  # a formula derived here
            continue
        years = re.findall(r"\b\d{4}\b", equation.source)
        found = [a for a in EQUATIONS if a.place in equation.source]
        assert found, equation.source
        assert all(str(a.year) in years for a in found)


def test_every_method_is_one_that_the_code_names():
    """The same journal, volume and page stand where the method is programmed."""
    sources = [
        path.read_text(encoding="utf-8")
        for path in (ROOT / "trajcage").rglob("*.py")
        if path.name != "references.py"
    ]
    text = re.sub(r"[\s#\"]+", " ", " ".join(sources))
    named = {article for _, articles in METHODS for article in articles}
    lost = [a for a in named if not re.search(rf"{a.volume}, {a.page}\b", text)]
    assert lost == []


def test_every_quantity_with_a_method_exists():
    settings = RunSettings()
    known = {f.name for d in (2, 3) for f in settings.fields(d)}
    known |= {table.path.rpartition("/")[2] for table in settings.tables(3)}
    known |= {array.path.split("/")[2] for array in settings.arrays(3, 1.0)}
    known |= {"wca diameter", "errors of means"}
    assert {name for names, _ in METHODS for name in names} <= known


def test_cite_names_what_a_file_rests_on(tmp_path):
    text = call("cite").stdout
    assert f"Version {trajcage.__version__}" in text
    assert "10.1002/jcc.21787" in text
    source = scenario.write_gsd(tmp_path / "a.gsd", [scenario.shaken()])
    path = tmp_path / "r.h5"
    words = ("measure", source, "-o", path, "--diameter", "wca:40")
    call(*words, "--skip", "order", "--skip", "time", "-q")
    text = call("cite", path).stdout
    for place in ("57, 1259", "91, 461", "105, 11849", "47, 4714", "51, 635"):
        assert place in text
    assert "28, 784" not in text  # bond order was skipped
    assert "58, 3515" not in text  # so was cage breaking
    entries = call("cite", path, "--bibtex").stdout
    keys = re.findall(r"^@(?:article|misc)\{(\S+),$", entries, re.MULTILINE)
    assert len(keys) == len(set(keys)) == entries.count("@")
    assert entries.count("{") == entries.count("}")


@pytest.mark.parametrize("shell", ["bash", "zsh", "fish"])
def test_completion_prints_a_script(shell):
    assert "_TRAJCAGE_COMPLETE" in call("completion", shell).stdout


def test_an_unknown_shell_gets_a_suggestion():
    assert "did you mean bash?" in call("completion", "bsh", code=2).stderr


@pytest.mark.parametrize(
    ("words", "expected"),
    [
        ("trajcage su", ["plain,summary"]),
        ("trajcage export a.h5 --to p", ["plain,parquet"]),
        ("trajcage lattice f", ["plain,fcc"]),
        ("trajcage plot a.h5 --only sl", ["plain,slice"]),
        ("trajcage measure --mob", ["plain,--mobility-window"]),
    ],
)
def test_a_shell_gets_completions(words, expected):
    """What the script of bash asks the program for."""
    split = words.split()
    asked = {
        "COMP_WORDS": words,
        "COMP_CWORD": str(len(split) - 1),
        "_TRAJCAGE_COMPLETE": "bash_complete",
    }
    done = subprocess.run(
        [
            sys.executable,
            "-c",
            "from trajcage.cli import main; main(prog_name='trajcage')",
        ],
        env=os.environ | asked,
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.stdout.splitlines() == expected
