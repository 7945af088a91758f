"""Result files as Parquet and CSV; what is written is all there or not there."""

import csv
import io
import json
import subprocess
import sys

import numpy as np
import pandas as pd
import pytest
import run_scenario as scenario
from pyarrow import parquet
from test_cli import call

import trajcage
from trajcage.run import parquet as our_parquet
from trajcage.run.exporting import columns_of


@pytest.fixture(scope="module")
def cages(tmp_path_factory):
    folder = tmp_path_factory.mktemp("export")
    source = scenario.write_gsd(
        folder / "a.gsd", [scenario.shaken(seed) for seed in range(4)]
    )
    path = folder / "cages.h5"
    call("measure", source, "-o", path, "--store-positions", "--time-unit", "tau", "-q")
    return path


@pytest.mark.parametrize("flags", [(), ("--observables",)])
def test_parquet_holds_what_csv_holds(cages, tmp_path, flags):
    path = tmp_path / "c.parquet"
    call("export", cages, "--to", "parquet", "-o", path, *flags)
    text = call("export", cages, "--to", "csv", *flags).stdout
    found = pd.read_parquet(path)
    rows = list(csv.DictReader(io.StringIO(text)))
    assert list(found.columns) == list(rows[0])
    assert len(found) == len(rows) == (4 if flags else 4 * 27)
    for name in found.columns:
        column = [row[name] for row in rows]
        if isinstance(found[name].dtype, pd.CategoricalDtype):
            assert found[name].tolist() == column
        else:
            read = np.array(column, dtype=found[name].dtype)
            assert np.array_equal(found[name].to_numpy(), read, equal_nan=True), name


def test_parquet_carries_units_and_provenance(cages, tmp_path):
    path = tmp_path / "c.parquet"
    call("export", cages, "--to", "parquet", "-o", path)
    schema = parquet.read_schema(path)
    with trajcage.open_result(cages) as result:
        for field in result.fields.values():
            if field.per_particle:
                for name in columns_of(field):
                    told = schema.field(name).metadata
                    assert told[b"unit"].decode() == field.unit
                    assert told[b"description"].decode() == field.description
        assert json.loads(schema.metadata[b"trajcage"]) == result.parameters
    assert schema.field("time").metadata[b"unit"] == b"tau"
    assert schema.field("free_volume").metadata[b"unit"] == b"length+3"


@pytest.mark.parametrize(
    ("rows", "groups"), [(60, [54, 54]), (27, [27] * 4), (10, [10, 10, 7] * 4)]
)
def test_row_groups_are_bounded(cages, tmp_path, monkeypatch, rows, groups):
    monkeypatch.setattr(our_parquet, "_LARGEST_GROUP", rows)
    path = tmp_path / "c.parquet"
    call("export", cages, "--to", "parquet", "-o", path, "--field", "free_volume")
    written = parquet.read_metadata(path)
    sizes = [written.row_group(k).num_rows for k in range(written.num_row_groups)]
    assert sizes == groups
    with trajcage.open_result(cages) as result:
        expected = np.asarray(result["free_volume"]).ravel()
    found = pd.read_parquet(path)
    assert np.array_equal(found["free_volume"], expected, equal_nan=True)


def test_an_export_loads_no_geometry():
    code = (
        "import sys, trajcage.cli.export, trajcage.run.exporting, trajcage.run.inputs\n"
        "print(sorted({'numba', 'MDAnalysis', 'freud', 'matplotlib'} & set(sys.modules)))"
    )
    words = [sys.executable, "-c", code]
    done = subprocess.run(words, capture_output=True, text=True, check=True)
    assert done.stdout == "[]\n"


def test_without_pyarrow_the_extra_is_named(cages, tmp_path, monkeypatch):
    monkeypatch.setitem(sys.modules, "pyarrow", None)
    path = tmp_path / "c.parquet"
    told = call("export", cages, "--to", "parquet", "-o", path, code=2).stderr
    assert "trajcage[parquet]" in told
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("form", ["csv", "parquet", "npz", "extxyz"])
def test_a_failed_export_leaves_nothing_behind(cages, tmp_path, form):
    words = ("export", cages, "--to", form, "--field")
    path = tmp_path / "out"
    told = call(*words, "free_volum", "-o", path, code=2).stderr
    assert "did you mean free_volume?" in told
    assert list(tmp_path.iterdir()) == []
    away = tmp_path / "no" / "out"
    told = call(*words, "free_volume", "-o", away, code=1).stderr
    assert f"cannot write {away}" in told


def test_an_export_replaces_a_file_only_if_told(cages, tmp_path):
    path = tmp_path / "out.npz"
    path.write_text("mine")
    words = ("export", cages, "--to", "npz", "-o", path)
    assert "--overwrite" in call(*words, code=1).stderr
    assert path.read_text() == "mine"
    call(*words, "--overwrite")
    with np.load(path) as arrays:
        assert arrays["free_volume"].shape == (4, 27)
    assert [found.name for found in tmp_path.iterdir()] == ["out.npz"]


def test_a_field_of_the_other_kind_is_told(cages):
    words = ("export", cages, "--to", "csv", "--field")
    assert "add --observables" in call(*words, "packing_fraction", code=2).stderr
    told = call(*words, "free_volume", "--observables", code=2).stderr
    assert "leave out --observables" in told


def test_a_misspelled_format_gets_a_suggestion(cages):
    told = call("export", cages, "--to", "parket", code=2).stderr
    assert "did you mean parquet?" in told
