"""Diameters, boxes and dimensions as people give them."""

import numpy as np
import pytest

from trajcage.errors import InputError, UsageError
from trajcage.readers import InputOptions, open_trajectory
from trajcage.readers.text import decimal_spacing

TEXT = "3\n\nbig 1.0 2.0 3.0\nsmall 4.0 5.0 6.0\nbig 7.5 8.25 9.125\n"


@pytest.fixture
def xyz(tmp_path):
    path = tmp_path / "a.xyz"
    path.write_text(TEXT)
    return path


def radii(path, diameter):
    options = InputOptions(path, diameter=diameter, box="10,10,10")
    with open_trajectory(options) as trajectory:
        return trajectory.frame(0).radii.tolist()


@pytest.mark.parametrize(
    ("diameter", "expected"),
    [
        (1.2, [0.6, 0.6, 0.6]),
        ("1.2", [0.6, 0.6, 0.6]),
        ("big=1.4, small=1", [0.7, 0.5, 0.7]),
        ({"big": 1.4, "small": 1}, [0.7, 0.5, 0.7]),
    ],
)
def test_diameters(xyz, diameter, expected):
    assert radii(xyz, diameter) == expected


@pytest.mark.parametrize(
    "content",
    [
        "1.4\n1.0\n1.2\n",
        "# id diameter\n2 1.2\n0 1.4\n\n1 1.0  # the small one\n",
        "0,1.4\n1,1.0\n2,1.2\n",
    ],
)
def test_diameters_from_a_file(xyz, tmp_path, content):
    table = tmp_path / "d.txt"
    table.write_text(content)
    assert radii(xyz, f"@{table}") == [0.7, 0.5, 0.6]


@pytest.mark.parametrize(
    ("content", "message"),
    [
        ("1.4\n1.0\n", "expected 3 diameters.*has 2"),
        ("1.4\n1.0\n-1\n", "line 3: expected a positive diameter, found -1"),
        ("1.4\nbig\n1\n", "line 2: .*found 'big'"),
        ("0 1.4\n1.0\n2 1\n", "line 2"),
        ("0 1.4\n1 1.0\n7 1\n", "not those of the particles; they differ in 2, 7"),
        ("0 1.4\n1 1.0\n1 1\n", "differ in 2"),
    ],
)
def test_bad_diameter_files(xyz, tmp_path, content, message):
    table = tmp_path / "d.txt"
    table.write_text(content)
    with pytest.raises(InputError, match=message):
        radii(xyz, f"@{table}")


def test_missing_diameter_file(xyz, tmp_path):
    with pytest.raises(InputError, match="cannot read the diameters"):
        radii(xyz, f"@{tmp_path / 'none.txt'}")


@pytest.mark.parametrize(
    "diameter", ["about one", "", "big=", "=1", "big=1,big=2", "big=1,,", "wca", "@"]
)
def test_unknown_diameter_words_list_the_forms(xyz, diameter):
    with pytest.raises(UsageError, match=r"\(1\.0\).*A=1\.0,B=1\.4.*@diameters\.txt"):
        InputOptions(xyz, diameter=diameter)


@pytest.mark.parametrize("diameter", [0, -1.0, "nan", "inf", "big=0", {"big": -1}])
def test_diameters_must_be_positive(xyz, diameter):
    with pytest.raises(UsageError, match="positive"):
        InputOptions(xyz, diameter=diameter)


def test_near_miss_of_a_type_name(xyz):
    with pytest.raises(
        InputError, match=r"did you mean small\?\), but the types are big, small"
    ):
        radii(xyz, "big=1,smal=1")
    with pytest.raises(InputError, match="did you mean big"):
        radii(xyz, "BIG=1,small=1")


def test_types_without_diameter_are_listed(xyz):
    with pytest.raises(InputError, match="none is given for small; add small=VALUE"):
        radii(xyz, "big=1")


def test_no_diameters_at_all(xyz):
    with pytest.raises(InputError, match=r"no particle diameters are known.*@diam"):
        open_trajectory(InputOptions(xyz, box="10,10,10"))


@pytest.mark.parametrize(
    ("box", "vectors"),
    [
        ("10,11,12", np.diag([10, 11, 12])),
        ([10, 11, 12], np.diag([10, 11, 12])),
        ("10,11,12,90,90,90", np.diag([10, 11, 12])),
        # gamma = 60 degrees: b = 12 (1/2, sqrt(3)/2).
        ("10,12,14,90,90,60", [[10, 0, 0], [6, 10.392304845, 0], [0, 0, 14]]),
        ("10,0,0,3,12,0,1,0.5,14", [[10, 0, 0], [3, 12, 0], [1, 0.5, 14]]),
        ([[10, 0, 0], [3, 12, 0], [1, 2, 14]], [[10, 0, 0], [3, 12, 0], [1, 2, 14]]),
    ],
)
def test_boxes(xyz, box, vectors):
    with open_trajectory(InputOptions(xyz, diameter=1.0, box=box)) as trajectory:
        found = trajectory.frame(0).box.vectors
    np.testing.assert_allclose(found, vectors, atol=1e-9)


@pytest.mark.parametrize("box", ["10", "10,10,x", "1,2,3,4,5", [1, 2, np.nan], "", []])
def test_boxes_that_are_none(xyz, box):
    with pytest.raises(UsageError, match="the box is given as"):
        InputOptions(xyz, box=box)


@pytest.mark.parametrize(
    ("option", "value"),
    [("dimensions", 4), ("periodic", "xq"), ("periodic", "xx"), ("periodic", ""),
     ("dt", 0.0), ("dt", float("nan"))],
)  # fmt: skip
def test_options_that_cannot_mean_anything(xyz, option, value):
    with pytest.raises(UsageError, match=f"{option}|{str(value) or 'letters'}"):
        InputOptions(xyz, **{option: value})


def test_negative_volume_and_flat_boxes(xyz):
    with pytest.raises(InputError, match="span no volume"):
        open_trajectory(InputOptions(xyz, diameter=1, box="10,10,0")).frame(0)


def test_two_edges_mean_two_dimensions(tmp_path):
    path = tmp_path / "a.xyz"
    path.write_text("2\n\nA 1 2 0\nA 3 4 0\n")
    with open_trajectory(InputOptions(path, diameter=1, box="10,11")) as trajectory:
        assert trajectory.dimensions == 2
        assert trajectory.frame(0).box.volume == pytest.approx(110.0)
        assert "two edges" in trajectory.describe().dimensions_source


def test_few_particles_in_a_plane_stay_three_dimensional(tmp_path):
    path = tmp_path / "a.xyz"
    path.write_text("2\n\nA 1 2 0\nA 3 4 0\n")
    with open_trajectory(InputOptions(path, diameter=1, box="9,9,9")) as trajectory:
        assert trajectory.dimensions == 3


def test_plane_of_tracked_particles_in_the_open(tmp_path):
    path = tmp_path / "a.xyz"
    path.write_text("4\n\nA 1 2 0\nA 3 4 0\nA 2 7 0\nA 5 5 0\n")
    options = InputOptions(path, diameter=1, periodic="none")
    with open_trajectory(options) as trajectory:
        box = trajectory.frame(0).box
    np.testing.assert_allclose(box.vectors, [[4, 0], [0, 5]])
    assert box.periodic == (False, False)


def test_missing_empty_and_folder(tmp_path):
    with pytest.raises(InputError, match="found nothing at"):
        open_trajectory(InputOptions(tmp_path / "none.gsd"))
    for suffix in ("gsd", "dump", "xyz", "data", "gro", "xtc", "h5md"):
        empty = tmp_path / f"a.{suffix}"
        empty.touch()
        with pytest.raises(InputError, match="is empty"):
            open_trajectory(InputOptions(empty))
    with pytest.raises(InputError, match="is a folder"):
        open_trajectory(InputOptions(tmp_path))


def test_frames_beyond_the_end(xyz):
    with open_trajectory(InputOptions(xyz, diameter=1, box="9,9,9")) as trajectory:
        for index in (1, -1):
            with pytest.raises(InputError, match=f"no frame {index}: .* 0 to 0"):
                trajectory.frame(index)


@pytest.mark.parametrize(
    ("words", "spacing"),
    [
        ("0.125 1.250 10.001 3.000", 1e-3),  # fixed decimals
        ("12.3456 1.5 0.001", 1e-4),  # six significant digits
        ("1.5 0.25 3", 1e-5),  # too few digits to tell: six are assumed
        ("0.5 1.0 1.5 2.0", 1e-5),  # a lattice printed in full, not 0.1
        ("0.1 1.2 2.3 3.4 4.5 5.6 6.7", 0.1),  # one decimal, all digits occur
        ("1.5e-05 12.5", 1e-4),
        ("nan 1.250 2.375 0.111", 1e-3),
        ("0.10000000000000001 7.25", 1e-16),
        ("0 0", 0.0),
        ("", 0.0),
    ],
)
def test_spacing_of_printed_numbers(words, spacing):
    found = decimal_spacing(words.encode().split())
    assert spacing <= found <= 1.001 * spacing + 9e-16
