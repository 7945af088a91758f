"""Words and bytes that nobody meant: one clear error each, never a traceback."""

import contextlib
from pathlib import Path

import hypothesis
import numpy as np
import pytest
import store_scenario as scenario
from click.testing import CliRunner
from hypothesis import strategies as st

from trajcage.cli import main
from trajcage.errors import ResultFileError, TrajcageError
from trajcage.readers.options import parse_box, parse_diameter
from trajcage.run.inputs import FrameSelection, input_options
from trajcage.store import open_result, salvage

bounded = hypothesis.settings(max_examples=60, deadline=None)

# Words near those that mean something, and any others.
NUMBERS = st.one_of(
    st.integers(-3, 1000).map(str),
    st.floats(width=32).map(str),
    st.sampled_from(["1e400", "0x1", "1_0", "١", "", " ", "nan", "-0.0", "1,5"]),
)
WORDS = st.one_of(
    NUMBERS,
    st.lists(NUMBERS, max_size=9).map(",".join),
    st.dictionaries(st.text(max_size=3), NUMBERS, max_size=3).map(
        lambda d: ",".join(f"{k}={v}" for k, v in d.items())
    ),
    st.sampled_from(["@", "@/nowhere", "wca:", "wca:40", "wca:-1", "xyz", "none"]),
    st.text(st.characters(exclude_characters="\0", exclude_categories=["Cs"])),
)


@bounded
@hypothesis.given(WORDS)
def test_boxes_are_numbers_or_refused(word):
    told = repr(word)
    try:
        box = parse_box(word)
    except TrajcageError as error:
        told = str(error)
    else:
        assert box.shape in {(2,), (3,), (6,), (2, 2), (3, 3)}
        assert np.isfinite(box).all()
    assert repr(word) in told


@bounded
@hypothesis.given(WORDS)
def test_diameters_are_positive_numbers_or_refused(word):
    diameter, told = None, ""
    try:
        diameter = parse_diameter(word)
    except TrajcageError as error:
        told = str(error)
    if diameter is None:
        assert repr(word) in told
    elif isinstance(diameter, dict):
        assert all(0.0 < value < np.inf for value in diameter.values())
    elif isinstance(diameter, float):
        assert 0.0 < diameter < np.inf
    else:
        assert isinstance(diameter, Path)


@bounded
@hypothesis.given(
    st.tuples(*[st.none() | st.integers(-30, 30)] * 3), st.integers(0, 20)
)
def test_selections_are_slices_or_refused(slice_, n_frames):
    try:
        frames = FrameSelection(*slice_).of(n_frames)
    except TrajcageError:
        step = slice_[2]
        assert (step is not None and step < 1) or not range(n_frames)[slice(*slice_)]
    else:
        assert list(frames) == list(range(n_frames))[slice(*slice_)]


@bounded
@hypothesis.given(
    diameter=st.none() | WORDS,
    box=st.none() | WORDS,
    dimensions=st.none() | st.integers(-1, 5),
    periodic=st.none() | WORDS,
    dt=st.none() | st.floats(),
)
def test_options_of_an_input_are_used_or_refused(**options):
    try:
        options = input_options("a.gsd", **options)
    except TrajcageError:
        return
    assert options.dimensions in {None, 2, 3}
    assert options.dt is None or 0.0 < options.dt < np.inf
    assert options.periodic in {None, "none"} or set(options.periodic) <= set("xyz")


FLAGS = ["-o", "--diameter", "--box", "--periodic", "--dt", "--start", "--stop"]
FLAGS += ["--step", "--reach", "--workers", "--skip", "--resume", "--overwrite"]
FLAGS += ["--dask", "--csv", "--json", "--to", "--packing-fraction", "--topology"]
COMMANDS = ["measure", "inspect", "merge", "salvage", "summary", "breaks", "export"]


@hypothesis.settings(max_examples=40, deadline=None)
@hypothesis.given(
    st.sampled_from([*COMMANDS, "lattice"]),
    st.lists(st.sampled_from(FLAGS) | WORDS.map(lambda w: w[:20]), max_size=6),
)
def test_commands_exit_with_a_code_that_tells(tmp_path_factory, name, words):
    with contextlib.chdir(tmp_path_factory.mktemp("here")):
        done = CliRunner().invoke(main, [name, *words])
    if done.exception is not None and not isinstance(done.exception, SystemExit):
        raise done.exception
    assert done.exit_code in {0, 1, 2}
    assert done.exit_code == 0 or "rror" in done.output


@pytest.fixture(scope="module")
def original(tmp_path_factory):
    path = tmp_path_factory.mktemp("original") / "r.h5"
    scenario.run(path, 6)
    return path


SHARES = st.integers(0, 9_999)  # of the file, in units of 1 in 10,000


@hypothesis.settings(max_examples=60, deadline=None)
@hypothesis.given(
    patches=st.lists(st.tuples(SHARES, st.binary(min_size=1, max_size=64)), max_size=3),
    move=st.none() | st.tuples(SHARES, SHARES, SHARES),
    cut=st.none() | SHARES,
)
@hypothesis.example(patches=[], move=(0, 7, 202), cut=None)  # over the commit record
def test_damaged_files_are_read_or_refused(
    tmp_path_factory, original, patches, move, cut
):
    """Bytes replaced, moved and cut off anywhere."""
    whole = original.read_bytes()

    def place(share):
        return share * len(whole) // 10_000

    damaged = bytearray(whole)
    for share, patch in patches:
        damaged[place(share) : place(share) + len(patch)] = patch
    if move is not None:
        source, target, length = map(place, move)
        damaged[target : target + length] = damaged[source : source + length]
    if cut is not None:
        del damaged[place(cut) :]
    folder = tmp_path_factory.mktemp("damaged")
    path = folder / "r.h5"
    path.write_bytes(damaged)
    told = str(path)
    try:
        with open_result(path) as result:
            for name in result.fields:
                assert len(np.asarray(result[name])) == result.frames_complete
            for name in result.tables:
                result.table(name)
            for name in result.arrays:
                result.array(name)
            assert result.summary is not None
    except ResultFileError as error:
        told = str(error)
    assert str(path) in told
    try:
        frames = salvage(path, folder / "copy.h5")
    except ResultFileError:
        assert not (folder / "copy.h5").exists()
    else:
        with open_result(folder / "copy.h5") as copy:
            assert copy.frames_complete == frames
