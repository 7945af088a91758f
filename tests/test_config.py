"""Options from a TOML file and from an earlier result file."""

import dataclasses

import numpy as np
import pytest
import run_scenario as scenario
from test_cli import call

import trajcage
from trajcage.analysis.contacts import ContactOptions
from trajcage.analysis.order import OrderOptions
from trajcage.analysis.regions import RegionOptions
from trajcage.analysis.time_options import TimeOptions
from trajcage.cli.measure import command
from trajcage.run.configuration import (
    TABLES,
    read_configuration,
    recorded_configuration,
    to_toml,
)

#: Leaves out what these tests do not look at.
FAST = ("--skip", "cells", "--skip", "rattlers", "--skip", "time")


@pytest.fixture(scope="module")
def source(tmp_path_factory):
    frames = [scenario.shaken(seed) for seed in range(6)]
    return scenario.write_gsd(tmp_path_factory.mktemp("config") / "a.gsd", frames)


@pytest.fixture(scope="module")
def unusual(source):
    """Measured through the library with settings that no option of a command has."""
    path = source.parent / "unusual.h5"
    trajcage.measure(
        source,
        output=path,
        diameter={"A": 1.25},
        box=[[5.0, 0, 0], [0, 5.0, 0], [0, 0, 5.0]],
        start=1,
        step=2,
        reach=np.inf,
        skip=["regions"],
        order=OrderOptions(neighbors="cutoff", r_max=2.1),
        contacts=ContactOptions(1e-3, (1e-4, 1e-2)),
        regions=RegionOptions(3),
        time_analysis=TimeOptions(bonded=1.4, broken=1.7, max_lag=2),
        store_walls=True,
    ).close()
    return path


def options(path):
    """Recorded options; text and number of one diameter or box mean the same."""
    with trajcage.open_result(path) as result:
        found = result.parameters["options"]
    written = ("diameter", "effective_diameter", "box")
    return {k: v for k, v in found.items() if not k.startswith(written)}


def test_like_repeats_a_run_bit_for_bit(unusual, tmp_path):
    again = tmp_path / "again.h5"
    call("measure", "--like", unusual, "-o", again)
    scenario.assert_same(unusual, again)
    assert options(again) == options(unusual)


def test_a_printed_configuration_repeats_a_run_bit_for_bit(unusual, tmp_path):
    config, again = tmp_path / "run.toml", tmp_path / "again.h5"
    config.write_text(call("summary", unusual, "--toml").stdout)
    call("measure", "--config", config, "-o", again)
    scenario.assert_same(unusual, again)
    assert options(again) == options(unusual)


def test_the_command_line_goes_before_file_and_record(source, unusual, tmp_path):
    config, path = tmp_path / "run.toml", tmp_path / "r.h5"
    config.write_text("[time]\nbonded = 1.2\nbroken = 1.5\n[frames]\nstop = 5\n")
    words = ("measure", "--config", config, "--like", unusual, "-o", path)
    call(*words, "--bonded", 1.3, *FAST)
    found = options(path)
    assert found["time.bonded"] == 1.3
    assert found["time.broken"] == 1.5
    assert found["time.max_lag"] == 2
    assert found["frames.stop"] == 5
    assert found["frames.start"] == 1


def test_another_topology_replaces_the_recorded_input(tmp_path):
    first, other = tmp_path / "first.h5", tmp_path / "other.h5"
    fluid = ("measure", *scenario.FLUID, "--diameter", 1.62)
    call(*fluid, "--stop", 1, "-o", first, *FAST)
    source = scenario.write_gsd(tmp_path / "b.gsd", [scenario.shaken(9)])
    call("measure", source, "--like", first, "--diameter", 1.3, "-o", other)
    with trajcage.open_result(other) as result:
        assert result.n_particles == 27


def test_diameters_by_type_and_a_box_can_be_tables_and_lists(source, tmp_path):
    config = tmp_path / "run.toml"
    config.write_text(
        f"[input]\ntopology = '{source}'\ndiameter = {{ A = 1.2 }}\n"
        f"box = [5, 5, 5]\n[output]\noutput = '{tmp_path / 'r.h5'}'\n"
    )
    call("measure", "--config", config, *FAST, "--stop", 1)
    with trajcage.open_result(tmp_path / "r.h5") as result:
        assert set(2.0 * result.radii) == {1.2}


def test_a_changed_input_is_told(source, tmp_path):
    path = tmp_path / "a.gsd"
    path.write_bytes(source.read_bytes())
    first = tmp_path / "first.h5"
    call("measure", path, "-o", first, *FAST)
    assert "not what it was" not in (
        call("measure", "--like", first, "-o", tmp_path / "same.h5").stderr
    )
    scenario.write_gsd(path, [scenario.shaken(7)])
    told = call("measure", "--like", first, "-o", tmp_path / "new.h5").stderr
    assert "a.gsd is not what it was" in told


def test_every_option_has_its_place_in_the_tables():
    keys = {key for table in TABLES.values() for key in table}
    no_settings = {"verbose", "quiet", "resume", "overwrite", "like", "config", "help"}
    assert {p.name.replace("_", "-") for p in command.params} - no_settings <= keys
    # what is no option is a setting of a part
    parts = (OrderOptions, ContactOptions, RegionOptions, TimeOptions)
    names = {
        f.name.replace("_", "-") for part in parts for f in dataclasses.fields(part)
    }
    rest = keys - {str(p.name).replace("_", "-") for p in command.params}
    assert rest <= names


def test_toml_comes_back(unusual, tmp_path):
    with trajcage.open_result(unusual) as result:
        recorded = recorded_configuration(result)
    path = tmp_path / "run.toml"
    path.write_text(to_toml(recorded))
    assert read_configuration(path) == recorded


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("[time]\nbondd = 1.3", "'bondd' in [time] (did you mean bonded?)"),
        ("[tim]\nbonded = 1.3", "no table [tim] (did you mean time?)"),
        ("[run]\nbonded = 1.3", "'bonded' in [run]: it belongs into [time]"),
        ("workers = 2", "workers belongs into [run]"),
        ("time = 3", "time is a table"),
        ('[time]\nbonded = "x"', "expected a number as bonded in [time], got 'x'"),
        ("[frames]\nstop = 1.5", "expected a whole number as stop"),
        ("[cages]\nstrict = 1", "expected true or false as strict"),
        ("[output]\nskip = [1]", "expected a list of texts as skip"),
        ('[order]\nneighbors = "near"', "expected 'voronoi' or 'cutoff' as neighbors"),
        ("[time]\nbonded = 2.0", "broken"),
        ("[time", "not a TOML file"),
    ],
)
def test_a_wrong_configuration_gets_one_message(text, message, source, tmp_path):
    path, output = tmp_path / "run.toml", tmp_path / "r.h5"
    path.write_text(text)
    done = call("measure", source, "--config", path, "-o", output, code=2)
    assert message in done.stderr
    assert done.stderr.count("Error:") == 1
    assert not output.exists()


def test_a_missing_configuration_is_told(source, tmp_path):
    words = ("measure", source, "-o", tmp_path / "r.h5")
    told = call(*words, "--config", tmp_path / "no.toml", code=1).stderr
    assert "no.toml" in told
    assert "no.h5" in call(*words, "--like", tmp_path / "no.h5", code=1).stderr
