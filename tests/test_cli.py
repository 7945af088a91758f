"""Commands as their users meet them."""

import csv
import io
import json
import platform
import signal
import subprocess
import sys
import time

import numpy as np
import pytest
import run_scenario as scenario
from click.testing import CliRunner

import trajcage
from trajcage.cli import main
from trajcage.cli.lattice import LATTICE_NAMES
from trajcage.cli.measure import _SKIPPABLE
from trajcage.cli.plot import FIGURES as FIGURE_NAMES
from trajcage.kernel import jit
from trajcage.lattices import LATTICES
from trajcage.plots import FIGURES
from trajcage.run import FAMILIES
from trajcage.wording import MISSING, near_miss, with_error


def call(*words, code=0):
    """Run a command; check its exit code and that errors are one message."""
    done = CliRunner().invoke(main, [str(word) for word in words])
    if done.exception is not None and not isinstance(done.exception, SystemExit):
        raise done.exception
    assert done.exit_code == code, done.output
    assert "Traceback" not in done.output
    return done


@pytest.fixture(scope="module")
def monolayer(tmp_path_factory):
    path = tmp_path_factory.mktemp("cli") / "cages.h5"
    call("measure", scenario.MONOLAYER, "-o", path, "--stop", 4, "--store-positions")
    return path


def test_help_names_every_command_and_loads_nothing_heavy():
    code = (
        "import sys, time\n"
        "started = time.perf_counter()\n"
        "from trajcage.cli import main\n"
        "try:\n    main(['--help'])\n"
        "except SystemExit: pass\n"
        "heavy = {'numpy', 'numba', 'MDAnalysis', 'freud', 'h5py', 'scipy'}\n"
        "print(sorted(heavy & set(sys.modules)))\n"
        "print(f'help took {time.perf_counter() - started:.3f} s', file=sys.stderr)\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True
    )
    sys.stderr.write(done.stderr)
    assert done.stdout.endswith("[]\n")
    for name in ("inspect", "measure", "summary", "breaks", "export", "lattice"):
        assert f"  {name} " in done.stdout
        assert "Usage" in call(name, "--help").output


def test_the_module_is_a_program():
    done = subprocess.run(
        [sys.executable, "-m", "trajcage", "--version"],
        capture_output=True,
        text=True,
        check=True,
    )
    told = dict(line.split(" ") for line in done.stdout.splitlines())
    assert told["trajcage"] == trajcage.__version__
    assert told["python"] == platform.python_version()
    assert told["numpy"] == np.__version__
    assert set(told) > {"numba", "MDAnalysis", "freud-analysis", "gsd", "h5py"}


def test_names_told_without_loading_are_those_of_the_library():
    assert set(_SKIPPABLE) == set(FAMILIES)
    assert tuple(LATTICES) == LATTICE_NAMES
    assert tuple(FIGURES) == FIGURE_NAMES


def test_inspect_shows_text_and_json():
    text = call("inspect", *scenario.FLUID, "--diameter", "1.62").stdout
    assert "1372" in text
    assert "One diameter given for all particles: 1.62." in text
    found = json.loads(
        call("inspect", *scenario.FLUID, "--diameter", "1.62", "--json").stdout
    )
    assert found["packing_fraction"] == pytest.approx(0.45, abs=1e-6)
    assert found["n_frames"] == 60


def test_measure_keeps_stdout_empty(tmp_path):
    source = scenario.write_gsd(tmp_path / "a.gsd", [scenario.shaken()])
    done = call("measure", source, "-o", tmp_path / "r.h5")
    assert done.stdout == ""
    assert "1 frames of 27 particles" in done.stderr
    again = ("measure", source, "-o", tmp_path / "r.h5", "--overwrite")
    assert call(*again, "-q").output == ""
    log = call(*again, "-v").stderr
    assert call(*again).stderr.count("\n") == 1  # the log has ended
    for words in (str(source), "27 particles", "overlap tolerance", "cages", " s"):
        assert words in log
    assert "exclude each other" in call(*again, "-q", "-v", code=2).stderr


def test_summary_in_json_uses_the_words_of_the_file(monolayer):
    found = json.loads(call("summary", monolayer, "--json").stdout)
    with trajcage.open_result(monolayer) as result:
        scalars = {
            name
            for name, f in result.fields.items()
            if not (f.per_particle or f.shape or f.codes)
        }
        assert set(found["observables"]) == scalars
        diameter = found["mean_diameter"]
        volume = found["observables"]["free_volume_mean"]
        assert volume["mean"] == pytest.approx(
            np.mean(result["free_volume_mean"]) / diameter**2
        )
    assert found["complete"]
    assert {row["name"] for row in found["lattices"]} == {"square", "triangular"}
    assert found["equations_of_state"][0]["name"] == "kolafa-rottner"


def test_summary_as_text_stands_beside_references(monolayer):
    text = call("summary", monolayer).stdout
    for words in ("kolafa-rottner", "triangular", "compressibility_factor", "±"):
        assert words in text


def test_breaks_as_csv_has_a_header_without_events(tmp_path):
    source = scenario.write_gsd(tmp_path / "a.gsd", [scenario.shaken()] * 2)
    call("measure", source, "-o", tmp_path / "r.h5", "-q")
    head, *rows = call("breaks", tmp_path / "r.h5", "--csv").stdout.splitlines()
    assert rows == []
    assert {"id", "displacement_z", "neighbors_lost"} < set(head.split(","))
    both = call("breaks", tmp_path / "r.h5", "--csv", "--json", code=2)
    assert "give one" in both.stderr


def test_breaks_as_text_csv_and_json_agree(monolayer):
    text = call("breaks", monolayer, "--limit", 3).stdout
    rows = list(csv.DictReader(io.StringIO(call("breaks", monolayer, "--csv").stdout)))
    events = json.loads(call("breaks", monolayer, "--json").stdout)
    with trajcage.open_result(monolayer) as result:
        total = int(np.sum(result["cage_breaks"]))
        ids = result.ids[result.table("events")["particle"]]
    assert text.startswith(f"{total} cages broke")
    assert f"{total - 3} more" in text
    assert [int(row["id"]) for row in rows] == ids.tolist()
    assert [event["id"] for event in events] == ids.tolist()
    lost = [len(event["neighbors_lost"]) for event in events]
    assert lost == [len(row["neighbors_lost"].split()) for row in rows]
    assert all(
        2 * n >= event["n_neighbors_start"]
        for n, event in zip(lost, events, strict=True)
    )


def test_csv_holds_the_values_of_the_file(monolayer):
    out = call(
        "export",
        monolayer,
        "--to",
        "csv",
        "--field",
        "free_volume",
        "--field",
        "cage_status",
        "--start",
        1,
        "--stop",
        3,
    ).stdout
    rows = list(csv.DictReader(io.StringIO(out)))
    with trajcage.open_result(monolayer) as result:
        expected = np.asarray(result["free_volume"][1:3]).ravel()
    assert np.array_equal([float(row["free_volume"]) for row in rows], expected)
    assert {row["cage_status"] for row in rows} == {"closed"}
    frames = call("export", monolayer, "--to", "csv", "--observables").stdout
    assert len(list(csv.DictReader(io.StringIO(frames)))) == 4


def test_extended_xyz_and_npz_come_back(monolayer, tmp_path):
    xyz, npz = tmp_path / "c.xyz", tmp_path / "c.npz"
    call("export", monolayer, "--to", "extxyz", "-o", xyz)
    call("export", monolayer, "--to", "npz", "-o", npz)
    with trajcage.open_result(monolayer) as result, np.load(npz) as arrays:
        assert np.array_equal(arrays["free_volume"], result["free_volume"])
        positions = np.asarray(result["position"])
        lines = xyz.read_text().splitlines()
        assert lines[0] == "1024"
        assert 'pbc="T T F"' in lines[1]
        read = np.array([line.split()[1:3] for line in lines[2 : 2 + 1024]], float)
        assert np.array_equal(read, positions[0])
        # our own reader, which knows nothing of the writer, finds the same particles
        again = trajcage.inspect(xyz, dimensions=2, diameter=1.62)
        assert again.packing_fraction == pytest.approx(
            float(result["packing_fraction"][0]), rel=1e-6
        )
        assert again.input.n_frames == 4


def test_lattice_prints_the_reference_of_the_library():
    found = json.loads(
        call("lattice", "fcc", "--packing-fraction", "0.545", "--json").stdout
    )
    reference = trajcage.lattice("fcc", 0.545)
    assert found["free_volume"] == reference.free_volume
    assert found["bounding_neighbors"] == 12
    assert found["status"] == "closed"
    assert "sqrt(2)*pi/6" in call("lattice").stdout
    both = call("lattice", "fcc", "sc", "--packing-fraction", "0.5").stdout
    assert both.count("free_volume") == 2


@pytest.mark.parametrize(
    ("words", "code", "message"),
    [
        (["mesure"], 2, "did you mean measure?"),
        (["measure", "--outptu", "a"], 2, "Did you mean '--output'?"),
        (["measure", "a.gsd"], 2, "Missing option '-o'"),
        (["measure", "nothing.gsd", "-o", "r.h5"], 1, "nothing at nothing.gsd"),
        (["inspect", "nothing.gsd"], 1, "nothing at nothing.gsd"),
        (["inspect", scenario.FLUID[0]], 1, "--diameter"),
        (["inspect", *reversed(scenario.FLUID)], 1, "the topology first"),
        (["summary", "nothing.h5"], 1, "nothing.h5"),
        (["breaks", scenario.CRYSTAL], 1, "not an HDF5 file"),
        (["lattice", "fc", "--packing-fraction", "0.5"], 2, "did you mean fcc?"),
        (["lattice", "fcc", "--packing-fraction", "0.8"], 2, "close packing"),
        (["lattice", "fcc", "0.5"], 2, "write --packing-fraction 0.5"),
        (["measure", scenario.CRYSTAL, "-o", "r.h5", "--start", 50], 2, "0 to 19"),
        (["measure", scenario.CRYSTAL, "-o", "r.h5", "--reach", "bx"], 2, "or 'box'"),
        (["measure", scenario.CRYSTAL, "-o", "r.h5", "--skip", "ordr"], 2, "order?"),
        (["plot", "r.h5", "-o", "d", "--only", "slise"], 2, "did you mean slice?"),
        (
            ["measure", scenario.CRYSTAL, "-o", "r.h5", "--diameter", "x"],
            2,
            "diameters",
        ),
    ],
)
def test_mistakes_get_one_message_and_the_right_exit_code(
    words, code, message, tmp_path, monkeypatch
):
    monkeypatch.chdir(tmp_path)
    done = call(*words, code=code)
    assert message in done.stderr
    assert done.stderr.count("Error:") == 1
    assert list(tmp_path.iterdir()) == []


def test_export_refuses_what_it_cannot_do(monolayer, tmp_path):
    source = scenario.write_gsd(tmp_path / "a.gsd", [scenario.shaken()])
    bare = tmp_path / "bare.h5"
    call("measure", source, "-o", bare, "--skip", "time", "-q")
    out = call("export", bare, "--to", "extxyz", code=2).stderr
    assert "--store-positions" in out
    assert "skip time" in call("breaks", bare, code=1).stderr
    assert "name it with -o" in call("export", bare, "--to", "npz", code=2).stderr
    out = call("export", bare, "--to", "csv", "--field", "volume", code=2).stderr
    assert "free_volume" in out
    out = call("export", bare, "--to", "csv", "-o", source, code=1).stderr
    assert "--overwrite" in out


def test_ctrl_c_exits_with_130_and_leaves_a_good_file(tmp_path):
    path = tmp_path / "cages.h5"
    command = [sys.executable, "-m", "trajcage", "measure", scenario.GLASS, "-o", path]
    process = subprocess.Popen(
        command, stderr=subprocess.PIPE, text=True, start_new_session=True
    )
    deadline = time.monotonic() + 120
    while not path.exists() and time.monotonic() < deadline:
        time.sleep(0.05)
    process.send_signal(signal.SIGINT)
    told = process.communicate(timeout=60)[1]
    assert process.returncode == 130, told
    assert "stopped by SIGINT" in told
    assert "--resume" in told
    with trajcage.open_result(path) as result:
        assert 1 <= result.frames_complete < 60
    text = call("summary", path).stdout
    assert "NOT complete" in text


@pytest.mark.parametrize(
    ("mean", "error", "text"),
    [
        (9.4117, 0.0194, "9.412 ± 0.019"),
        (0.0005970, 0.000035, "0.000597 ± 0.000035"),
        (123.4, 12.0, "123 ± 12"),
        (0.45, 0.0, "0.45"),
        (None, None, MISSING),
    ],
)
def test_means_are_written_to_two_digits_of_their_error(mean, error, text):
    assert with_error(mean, error) == text


@pytest.mark.parametrize(
    ("name", "found"),
    [
        ("free_volum", "free_volume"),
        ("Free-Volume", "free_volume"),
        ("volume", "free_volume"),
        ("zzz", None),
        ("", None),
    ],
)
def test_a_near_miss_is_suggested(name, found):
    known = ("free_volume", "cage_status")
    expected = f" (did you mean {found}?)" if found else ""
    assert near_miss(name, known) == expected


def test_the_first_run_says_that_it_compiles(tmp_path, monkeypatch):
    source = scenario.write_gsd(tmp_path / "a.gsd", [scenario.shaken()])
    words = ("measure", source, "-o", tmp_path / "r.h5", "--overwrite")
    assert "compiling" not in call(*words).stderr
    monkeypatch.setattr(jit, "_CACHE_DIRECTORY", tmp_path)  # where no code is
    assert "compiling the geometry" in call(*words).stderr
