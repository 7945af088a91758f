"""Result files: H5MD 1.1 in HDF5, written so that a crash costs nothing committed."""

from trajcage.store.provenance import describe_file
from trajcage.store.result import Result, open_result
from trajcage.store.salvage import salvage
from trajcage.store.series import Series
from trajcage.store.specs import ArraySpec, TableSpec
from trajcage.store.writer import ResultWriter

__all__ = [
    "ArraySpec",
    "Result",
    "ResultWriter",
    "Series",
    "TableSpec",
    "describe_file",
    "open_result",
    "salvage",
]
