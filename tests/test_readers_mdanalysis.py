"""Formats read through MDAnalysis, against what was written by hand or by it."""

import json
import os
import shutil
import subprocess
import sys
from dataclasses import asdict

import gsd.hoomd
import MDAnalysis
import numpy as np
import pytest
from MDAnalysis.lib.formats.libdcd import DCDFile
from MDAnalysis.lib.formats.libmdaxdr import TRRFile, XTCFile

from trajcage.errors import FrameError, InputError
from trajcage.readers import InputOptions, open_trajectory

POSITIONS = np.array(
    [[0.5, 1.0, 2.0], [3.0, 2.5, 0.5], [0.25, 4.0, 1.125], [1.5, 2.5, 4.5]]
)
CUBE = 5.0 * np.eye(3)


def write_gro(path, positions=POSITIONS, box="5.0 5.0 5.0", names="ABBA"):
    lines = ["hard spheres, lengths in sigma", str(len(positions))]
    for i, (x, y, z) in enumerate(positions):
        name = names[i % len(names)]
        lines.append(f"{1:5d}{'HS':<5}{name:>5}{i + 1:5d}{x:8.3f}{y:8.3f}{z:8.3f}")
    path.write_text("\n".join([*lines, box]) + "\n")
    return path


def write_frames(path, n_frames=3, box=CUBE):
    """Write a trajectory without any unit conversion, steps 100 apart."""
    n = len(POSITIONS)
    suffix = path.suffix
    with {".xtc": XTCFile, ".trr": TRRFile, ".dcd": DCDFile}[suffix](
        str(path), "w"
    ) as f:
        if suffix == ".dcd":
            f.write_header("", n, 0, 100, 0.005, 1)
        for i in range(n_frames):
            positions = np.asarray(POSITIONS + 0.125 * i, np.float32)
            if suffix == ".xtc":
                f.write(positions, np.asarray(box, np.float32), 100 * i, 0.5 * i, 1000)
            elif suffix == ".trr":
                matrix = np.asarray(box, np.float32)
                f.write(positions, None, None, matrix, 100 * i, 0.5 * i, 0.0, n)
            else:
                f.write(positions, [5, 90, 5, 90, 90, 5])
    return path


def open_files(*files, **options):
    options.setdefault("diameter", 1.0)
    return open_trajectory(InputOptions(*files, **options))


def test_gro_in_units_of_sigma_is_not_multiplied_by_ten(tmp_path):
    with open_files(write_gro(tmp_path / "a.gro")) as trajectory:
        frame, description = trajectory.frame(0), trajectory.describe()
    assert frame.box.lengths.tolist() == [5, 5, 5]
    np.testing.assert_allclose(frame.positions, POSITIONS, atol=5e-7)
    # Four spheres of diameter 1 in a box of 5: phi = 4 (pi/6) / 125.
    assert frame.packing_fraction == pytest.approx(0.0167552, rel=1e-5)
    assert description.species == {"A": 2, "B": 2}
    assert description.format == "GRO"
    assert description.resolution == 1e-3
    assert description.time_unit == "step"


@pytest.mark.parametrize("suffix", ["xtc", "trr"])
def test_gro_with_xdr_trajectory(tmp_path, suffix):
    gro = write_gro(tmp_path / "a.gro")
    run = write_frames(tmp_path / f"run.{suffix}")
    with open_files(gro, run, diameter="A=1.0,B=1.4") as trajectory:
        assert trajectory.n_frames == 3
        frame, description = trajectory.frame(2), trajectory.describe()
    np.testing.assert_allclose(frame.positions, POSITIONS + 0.25, atol=5.1e-4)
    np.testing.assert_allclose(frame.box.lengths, [5, 5, 5], rtol=1e-7)
    assert frame.radii.tolist() == [0.5, 0.7, 0.7, 0.5]
    assert frame.time == 1.0
    assert description.time_unit == "time"  # never "ps"
    assert "unit its writer used" in description.time_source
    assert description.periodic == (True, True, True)


def test_xdr_steps_are_true_steps(tmp_path):
    run = write_frames(tmp_path / "run.trr")
    with open_files(run, dt=0.002) as trajectory:
        assert [trajectory.frame(i).step for i in range(3)] == [0, 100, 200]
        assert trajectory.frame(2).time == pytest.approx(0.4)


def test_xtc_resolution_is_its_precision(tmp_path):
    # More than nine particles, since XTC stores fewer without compression.
    positions = np.random.default_rng(1).uniform(0, 5, (20, 3))
    path = tmp_path / "a.xtc"
    universe = MDAnalysis.Universe.empty(20, trajectory=True)
    universe.atoms.positions = positions
    universe.dimensions = [5, 5, 5, 90, 90, 90]
    for digits in (3, 5):
        with MDAnalysis.Writer(
            str(path), 20, convert_units=False, precision=digits
        ) as file:
            file.write(universe.atoms)
        with open_files(path) as trajectory:
            frame = trajectory.frame(0)
        assert frame.resolution == pytest.approx(10.0**-digits)
        error = np.abs(frame.positions - positions).max()
        assert frame.resolution / 4 < error < 0.51 * frame.resolution + 5e-7


def test_xtc_of_few_particles_has_no_precision(tmp_path):
    with open_files(write_frames(tmp_path / "run.xtc")) as trajectory:
        assert trajectory.frame(0).resolution == 2.0**-21  # stored as floats


def test_float_resolution(tmp_path):
    run = write_frames(tmp_path / "run.trr", n_frames=1)
    with open_files(run) as trajectory:
        assert trajectory.frame(0).resolution == 2.0**-21  # floats between 4 and 8


def test_tilted_box_against_mdanalysis(tmp_path):
    dims = (5, 6, 7, 80, 75, 60)
    expected = MDAnalysis.lib.mdamath.triclinic_vectors(np.array(dims, np.float32))
    run = write_frames(tmp_path / "run.trr", n_frames=1, box=expected)
    with open_files(run) as trajectory:
        box = trajectory.frame(0).box
    np.testing.assert_allclose(box.vectors, expected, rtol=1e-5, atol=2e-6)


def test_pdb_with_dcd(tmp_path):
    pdb = tmp_path / "a.pdb"
    lines = ["CRYST1    5.000    5.000    5.000  90.00  90.00  90.00 P 1           1"]
    for i, (x, y, z) in enumerate(POSITIONS, start=1):
        lines.append(
            f"ATOM  {i:5d}  {'AB'[i % 2]:<3} HS  A{1:4d}    {x:8.3f}{y:8.3f}{z:8.3f}"
            "  1.00  0.00"
        )
    pdb.write_text("\n".join([*lines, "END"]) + "\n")
    dcd = write_frames(tmp_path / "run.dcd")
    with open_files(pdb, dcd, diameter={"A": 1.0, "B": 1.2}) as trajectory:
        frame = trajectory.frame(2)
        assert trajectory.n_frames == 3
        assert trajectory.describe().notes == ()
    np.testing.assert_allclose(frame.positions, POSITIONS + 0.25, atol=5e-7)
    np.testing.assert_allclose(frame.box.lengths, [5, 5, 5], rtol=1e-6)
    assert frame.radii.tolist() == [0.6, 0.5, 0.6, 0.5]
    with open_files(pdb) as trajectory:
        assert trajectory.describe().resolution == 1e-3
        np.testing.assert_allclose(trajectory.frame(0).positions, POSITIONS, atol=5e-7)


def test_dcd_clock_is_that_of_its_header(tmp_path):
    path = tmp_path / "run.dcd"
    with DCDFile(str(path), "w") as file:
        file.write_header(
            remarks="", natoms=4, istart=500, nsavc=250, delta=0.125, is_periodic=1
        )
        for _ in range(3):
            file.write(POSITIONS.astype("f4"), [5, 90, 5, 90, 90, 5])
    with open_files(path) as trajectory:
        assert [trajectory.frame(i).step for i in range(3)] == [500, 750, 1000]
        # In the file's own unit; read as AKMA units it would come out 20 times less.
        assert trajectory.frame(2).time == 125.0
    with open_files(path, dt=0.01) as trajectory:
        assert trajectory.frame(2).time == 10.0


def test_dcd_without_box(tmp_path):
    path = tmp_path / "run.dcd"
    with DCDFile(str(path), "w") as file:
        file.write_header("", 4, 0, 1, 1.0, 0)
        file.write(POSITIONS.astype("f4"), [0, 90, 0, 90, 90, 0])
    with pytest.raises(InputError, match="no box; give it with --box"):
        open_files(path)
    with open_files(path, box="5,5,5") as trajectory:
        assert trajectory.frame(0).box.volume == pytest.approx(125.0)


def test_pqr_radii(tmp_path):
    path = tmp_path / "a.pqr"
    rows = [
        f"ATOM {i} A HS 1 {x:.3f} {y:.3f} {z:.3f} 0.0 {0.5 + 0.1 * i:.2f}"
        for i, (x, y, z) in enumerate(POSITIONS)
    ]
    path.write_text("\n".join(rows) + "\n")
    with open_files(path, diameter=None, box=[5, 5, 5]) as trajectory:
        frame = trajectory.frame(0)
        assert "PQR" in trajectory.describe().radii_source
    np.testing.assert_allclose(frame.radii, [0.5, 0.6, 0.7, 0.8], rtol=1e-7)
    assert frame.resolution == 1e-3


def test_gro_with_more_frames_than_mdanalysis_reads(tmp_path):
    path = write_gro(tmp_path / "a.gro")
    path.write_text(path.read_text() * 2)
    with pytest.raises(InputError, match=r"a\.gro holds more than one frame"):
        open_files(path)


def test_topologies_of_other_readers_beside_xtc(tmp_path):
    run = write_frames(tmp_path / "run.xtc")
    data = tmp_path / "a.data"
    data.write_text(
        "title\n\n4 atoms\n1 atom types\n\n0 5 xlo xhi\n0 5 ylo yhi\n0 5 zlo zhi\n\n"
        "Atoms # sphere\n\n"
        + "".join(f"{i} 1 1.{i} 1.0 0 0 {i}\n" for i in (4, 2, 3, 1))
    )
    with open_files(data, run, diameter=None) as trajectory:
        frame = trajectory.frame(1)
    np.testing.assert_allclose(frame.radii, [0.55, 0.6, 0.65, 0.7])
    assert frame.ids.tolist() == [1, 2, 3, 4]


@pytest.mark.parametrize("cut", [3, 40, 100])
@pytest.mark.parametrize("suffix", ["xtc", "trr", "dcd"])
def test_truncated_trajectory_keeps_its_first_frames(tmp_path, suffix, cut):
    path = write_frames(tmp_path / f"run.{suffix}", n_frames=6)
    path.write_bytes(path.read_bytes()[:-cut])
    with open_files(path) as trajectory:
        fine = trajectory.frame(4).positions
        np.testing.assert_allclose(fine, POSITIONS + 0.5, atol=1e-3)
        if trajectory.n_frames == 6:
            with pytest.raises(FrameError, match=r"frame 5.*truncated"):
                trajectory.frame(5)
        else:
            assert trajectory.n_frames == 5
        notes = trajectory.describe().notes
    assert any("truncated" in note for note in notes)


def test_particle_numbers_of_topology_and_trajectory_must_match(tmp_path):
    gro = write_gro(tmp_path / "a.gro", POSITIONS[:3])
    run = write_frames(tmp_path / "run.xtc")
    with pytest.raises(InputError, match=r"number of atoms|has 3 particles"):
        open_files(gro, run)


def test_spaces_and_unicode_in_paths(tmp_path):
    folder = tmp_path / "my dáta σ"
    folder.mkdir()
    gro = write_gro(folder / "the tøp.gro")
    run = write_frames(folder / "rün 1.xtc")
    with open_files(gro, run) as trajectory:
        assert trajectory.frame(2).n_particles == 4


def test_read_only_folder(tmp_path):
    folder = tmp_path / "archive"
    folder.mkdir()
    run = write_frames(folder / "run.xtc")
    folder.chmod(0o555)
    script = (
        "import warnings; warnings.simplefilter('error')\n"
        "from trajcage.readers import InputOptions, open_trajectory\n"
        f"t = open_trajectory(InputOptions({str(run)!r}, diameter=1.0))\n"
        "print(t.n_frames, t.frame(2).time, t.describe().notes)\n"
    )
    command = [sys.executable, "-c", script]
    if os.access(folder, os.W_OK):  # root writes anywhere unless told otherwise
        if shutil.which("setpriv") is None:
            pytest.skip("cannot make a folder read-only for this user")
        command = ["setpriv", "--bounding-set=-dac_override", *command]
    try:
        done = subprocess.run(command, capture_output=True, text=True, check=False)
    finally:
        folder.chmod(0o755)
    assert done.returncode == 0, done.stderr
    assert done.stdout.split() == ["3", "1.0", "()"]
    assert [path.name for path in folder.iterdir()] == ["run.xtc"]


def test_unknown_format(tmp_path):
    path = tmp_path / "a.foo"
    path.write_text("what is this\n")
    with pytest.raises(InputError, match=r"cannot read .*a\.foo.*knows by its suffix"):
        open_files(path)


def test_topology_without_coordinates(tmp_path):
    path = tmp_path / "a.psf"
    path.write_text(
        "PSF\n\n       1 !NTITLE\n REMARKS\n\n       1 !NATOM\n"
        "       1 S    1    HS   A    A      0.000000        1.0000           0\n\n"
        "       0 !NBOND: bonds\n\n       0 !NTHETA: angles\n\n       0 !NPHI: dihedrals\n"
        "\n       0 !NIMPHI: impropers\n\n       0 !NDON: donors\n\n"
        "       0 !NACC: acceptors\n\n"
    )
    with pytest.raises(InputError, match="no coordinates; give the trajectory"):
        open_files(path)


def test_pdb_placeholder_box_is_no_box(tmp_path):
    path = tmp_path / "a.pdb"
    path.write_text(
        "CRYST1    1.000    1.000    1.000  90.00  90.00  90.00 P 1           1\n"
        "ATOM      1  A   HS  A   1       1.000   2.000   3.000  1.00  0.00\nEND\n"
    )
    with pytest.raises(InputError, match="no box"):
        open_files(path)
    with open_files(path, box="9,9,9") as trajectory:
        assert any("CRYST1" in note for note in trajectory.describe().notes)


def test_pdb_names_go_before_elements(tmp_path):
    path = tmp_path / "a.pdb"
    rows = [
        f"ATOM      {i}  {name}   HS  A   1       {i}.000   2.000   3.000  1.00  0.00"
        "           C"
        for i, name in enumerate("BAB", start=1)
    ]
    path.write_text("\n".join([*rows, "END"]) + "\n")
    with open_files(path, box="9,9,9", diameter="A=1,B=2") as trajectory:
        assert trajectory.frame(0).radii.tolist() == [1.0, 0.5, 1.0]


def test_gsd_topology_beside_dcd_makes_no_radii_up(tmp_path):
    frame = gsd.hoomd.Frame()
    frame.particles.N = 4
    frame.particles.position = POSITIONS
    frame.particles.types = ["A", "B"]
    frame.particles.typeid = [0, 1, 1, 0]
    run = write_frames(tmp_path / "run.dcd")
    for diameters in (None, [1.0, 1.4, 1.4, 1.0]):
        frame.particles.diameter = diameters
        with gsd.hoomd.open(str(tmp_path / "top.gsd"), "w") as file:
            file.append(frame)
        if diameters is None:
            with pytest.raises(InputError, match="no particle diameters"):
                open_files(tmp_path / "top.gsd", run, diameter=None)
        else:
            with open_files(tmp_path / "top.gsd", run, diameter=None) as trajectory:
                radii = trajectory.frame(2).radii
            np.testing.assert_allclose(radii, [0.5, 0.7, 0.7, 0.5], rtol=1e-7)


def test_frames_own_their_arrays(tmp_path):
    with open_files(write_frames(tmp_path / "run.dcd")) as trajectory:
        first = trajectory.frame(0)
        trajectory.frame(2)
    np.testing.assert_allclose(first.positions, POSITIONS, atol=1e-6)


@pytest.mark.parametrize("suffix", ["xtc", "trr", "dcd", "gro", "pdb", "pqr"])
def test_foreign_bytes_under_the_suffix(tmp_path, suffix):
    path = tmp_path / f"a.{suffix}"
    path.write_bytes(b"these bytes are no trajectory\n" * 40)
    with pytest.raises(InputError, match=rf"a\.{suffix}"):
        open_files(path)


@pytest.mark.parametrize("suffix", ["xtc", "trr", "dcd"])
def test_description_is_plain_data(tmp_path, suffix):
    run = write_frames(tmp_path / f"run.{suffix}")
    with open_files(run) as trajectory:
        description = json.loads(json.dumps(asdict(trajectory.describe())))
    assert description["n_frames"] == 3
    assert description["last_time"] == pytest.approx(1.0)
    assert description["last_step"] == 200
    assert description["box_lengths"] == pytest.approx([5, 5, 5])


def test_gro_beside_a_dump(tmp_path):
    dump = tmp_path / "run.dump"
    dump.write_text(
        "ITEM: TIMESTEP\n7\nITEM: NUMBER OF ATOMS\n4\n"
        "ITEM: BOX BOUNDS pp pp ff\n0 5\n0 5\n0 5\nITEM: ATOMS id x y z\n"
        "4 4 1 1\n2 2 1 1\n3 3 1 2\n1 1 1 1\n"
    )
    gro = write_gro(tmp_path / "a.gro")
    with open_files(gro, dump, diameter="A=1,B=2") as trajectory:
        frame = trajectory.frame(0)
    assert frame.radii.tolist() == [0.5, 1.0, 1.0, 0.5]
    assert frame.positions[:, 0].tolist() == [1, 2, 3, 4]
    assert frame.step == 7
    (tmp_path / "broken.psf").write_text("PSF?\n")
    with pytest.raises(InputError, match=r"cannot read the topology .*broken\.psf"):
        open_files(tmp_path / "broken.psf", dump)


def test_data_file_is_no_trajectory(tmp_path):
    data = tmp_path / "a.data"
    data.write_text("title\n")
    with pytest.raises(InputError, match="holds no trajectory"):
        open_files(write_gro(tmp_path / "a.gro"), data)
    with pytest.raises(InputError, match="section 'Atoms'"):
        open_files(data)
