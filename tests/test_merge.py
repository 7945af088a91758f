"""Parts measured apart become the file of one run; what does not fit is refused."""

import subprocess
import sys
from itertools import pairwise

import crowd
import numpy as np
import pytest
import run_scenario as scenario

import trajcage
from trajcage.errors import InputError, ResultFileError, UsageError

CUTS = (0, 2, 3, 6)  # of six frames of the glass, in which cages break


def measure(path, **options):
    trajcage.measure(scenario.GLASS, output=path, **options).close()
    return path


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    return tmp_path_factory.mktemp("parts")


@pytest.fixture(scope="module")
def parts(folder):
    return [
        measure(folder / f"{a}.h5", start=a or None, stop=b, store_walls=True)
        for a, b in pairwise(CUTS)
    ]


@pytest.fixture(scope="module")
def whole(folder):
    return measure(folder / "whole.h5", stop=CUTS[-1], store_walls=True)


def test_merged_parts_equal_one_run_and_can_be_resumed(parts, whole, tmp_path):
    path = tmp_path / "merged.h5"
    seen = []
    with trajcage.merge(
        [parts[2], parts[0], parts[1]],  # in any order
        output=path,
        progress=lambda *at: seen.append(at),
    ) as result:
        assert result.complete
        assert len(result.table("walls")["particle"]) == 6 * result.n_particles
        with trajcage.open_result(whole) as one:
            assert result.parameters["options"] == one.parameters["options"]
        assert result.parameters["merged"] == [str(part) for part in parts]
    assert seen[-1] == (6, 6)
    scenario.assert_same(path, whole)
    measure(path, stop=CUTS[-1], store_walls=True, resume=True)
    scenario.assert_same(path, whole)


@pytest.fixture
def small(tmp_path):
    """A trajectory and two parts of it, with positions."""
    source = crowd.write(tmp_path / "a.gsd", 6)
    paths = []
    for start, stop in ((0, 2), (2, 6)):
        paths.append(tmp_path / f"{start}.h5")
        trajcage.measure(
            source, output=paths[-1], start=start, stop=stop, store_positions=True
        ).close()
    return source, *paths


def test_a_moved_trajectory_is_replaced_by_stored_positions(small, tmp_path):
    source, *paths = small
    with_it, without = tmp_path / "with.h5", tmp_path / "without.h5"
    trajcage.merge(paths, output=with_it).close()
    moved = source.rename(tmp_path / "moved.gsd")
    told = []
    with trajcage.merge(paths, output=without, notify=told.append) as result:
        assert any("positions are those stored" in text for text in told)
        assert any(
            "positions are those stored" in t for t in result.parameters["notes"]
        )
    scenario.assert_same(with_it, without)
    again = tmp_path / "again.h5"
    trajcage.merge(paths, output=again, topology=moved).close()
    scenario.assert_same(with_it, again)


def test_without_any_positions_the_time_analysis_is_left_out(tmp_path):
    source = crowd.write(tmp_path / "a.gsd", 4)
    for start in (0, 2):
        trajcage.measure(
            source, output=tmp_path / f"{start}.h5", start=start, stop=start + 2
        ).close()
    whole = tmp_path / "whole.h5"
    trajcage.measure(source, output=whole, start=0, skip=["time", "regions"]).close()
    source.unlink()
    merged = tmp_path / "merged.h5"
    done = subprocess.run(
        [sys.executable, "-m", "trajcage", "merge", "0.h5", "2.h5", "-o", merged],
        cwd=tmp_path,
        capture_output=True,
        text=True,
        check=True,
    )
    assert "the time analysis and the regions are left out" in done.stderr
    assert done.stdout == ""
    with trajcage.open_result(merged) as result:
        assert any("left out" in note for note in result.parameters["notes"])
        assert set(result.parameters["options"]["skip"]) == {"regions", "time"}
    scenario.assert_same(merged, whole)


def test_parts_that_do_not_fit_are_refused(small, tmp_path):
    source, first, second = small
    target = tmp_path / "merged.h5"

    def refuse(kind, message, *paths, **options):
        with pytest.raises(kind, match=message):
            trajcage.merge(paths, output=target, **options)
        assert not target.exists()

    refuse(UsageError, "got none")
    refuse(ResultFileError, "an overlap between .* expected frame 2", first, first)
    with pytest.raises(UsageError, match="one of the parts"):
        trajcage.merge([first, second], output=first, overwrite=True)
    gap = tmp_path / "gap.h5"
    trajcage.measure(source, output=gap, start=4, store_positions=True).close()
    refuse(ResultFileError, "a gap between .* ends with frame 1", first, gap)
    other = tmp_path / "other.h5"
    trajcage.measure(
        source, output=other, start=2, reach=4.0, store_positions=True
    ).close()
    refuse(
        ResultFileError, r"other options: cages\.reach is None .* 4\.0", first, other
    )
    foreign = crowd.write(tmp_path / "b.gsd", 5)
    refuse(InputError, "is not the file", first, second, topology=foreign)
    target.write_bytes(b"")
    with pytest.raises(ResultFileError, match="--overwrite"):
        trajcage.merge([first, second], output=target)


def test_parts_with_changing_radii(tmp_path):
    """Radii that are constant in one part only."""
    lines = []
    for step, position in enumerate(crowd.crowd(4)):
        radius = 0.75 if step < 3 else 0.76
        lines += ["ITEM: TIMESTEP", str(step), "ITEM: NUMBER OF ATOMS", "27"]
        lines += ["ITEM: BOX BOUNDS pp pp pp", *["-2.5 2.5"] * 3]
        lines += ["ITEM: ATOMS id type x y z radius"]
        for k, (x, y, z) in enumerate(position):
            lines.append(f"{k + 1} 1 {x:.12f} {y:.12f} {z:.12f} {radius}")
    source = tmp_path / "grow.lammpstrj"
    source.write_text("\n".join(lines) + "\n")
    paths = [tmp_path / "a.h5", tmp_path / "b.h5"]
    trajcage.measure(source, output=paths[0], stop=2).close()
    trajcage.measure(source, output=paths[1], start=2).close()
    trajcage.measure(source, output=tmp_path / "whole.h5").close()
    with trajcage.merge(paths, output=tmp_path / "merged.h5") as result:
        assert np.allclose(result.radii[:, 0], [0.75, 0.75, 0.75, 0.76])
    scenario.assert_same(tmp_path / "merged.h5", tmp_path / "whole.h5")
