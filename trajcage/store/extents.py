"""How many rows of each dataset the commit record vouches for."""

from typing import Any

import h5py

from trajcage.store.commit import Commit, read_text

__all__ = ["datasets", "is_per_frame", "valid_rows"]


def datasets(file: Any) -> dict[str, Any]:
    """Every dataset once, by its first path."""
    found: dict[str, Any] = {}

    def visit(name: str, item: Any) -> None:
        if isinstance(item, h5py.Dataset):
            found[name] = item

    file.visititems(visit)
    return found


def is_per_frame(name: str) -> bool:
    """Whether the dataset of this path has one row a frame."""
    parts = name.split("/")
    return parts[:2] == ["trajcage", "frames"] or (
        parts[0] in {"particles", "observables"}
        and parts[-1] in {"value", "step", "time"}
    )


def valid_rows(file: Any, commit: Commit) -> dict[str, int]:
    """Rows to copy of every dataset that grows."""
    valid: dict[str, int] = {
        "trajcage/summary": commit.summary_bytes,
        "trajcage/state/a": 0,
        "trajcage/state/b": 0,
    }
    valid[f"trajcage/state/{'ab'[commit.state_slot]}"] = max(commit.state_bytes, 0)
    for name, dataset in datasets(file).items():
        kind = read_text(dataset.attrs, "kind")
        table, _, column = name.removeprefix("trajcage/").rpartition("/")
        if is_per_frame(name):
            valid[name] = commit.frames_complete
        elif kind == "column":
            valid[name] = commit.rows[table]
        elif kind == "offsets":
            valid[name] = commit.rows[table] + 1
        elif kind in {"ragged", "array"}:
            valid[name] = commit.rows[f"{table}/{column}" if table else column]
    return valid
