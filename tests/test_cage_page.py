"""The bundled script of the cage page: in the package, licensed, fetching nothing."""

import json
import re
import tomllib
from importlib.resources import files
from pathlib import Path

ROOT = Path(__file__).parents[1]


def bundle():
    return files("trajcage.plots").joinpath("cage_page.js").read_text("utf-8")


def test_the_bundle_holds_three_with_its_license():
    lock = json.loads((ROOT / "scripts/cage_page/package-lock.json").read_text())
    three = lock["packages"]["node_modules/three"]
    assert three["license"] == "MIT"
    # three.js keeps its revision, the middle of its version, as a string
    revision = three["version"].split(".")[1]
    text = bundle()
    assert f'"{revision}"' in text
    head, _, _ = text.partition("*/")
    assert "three.js authors" in head
    assert "Permission is hereby granted, free of charge" in head
    assert "THE SOFTWARE IS PROVIDED" in head
    wanted = json.loads((ROOT / "scripts/cage_page/package.json").read_text())
    for name, version in wanted["devDependencies"].items():
        assert version == lock["packages"][f"node_modules/{name}"]["version"]


def test_the_scripts_ask_for_nothing():
    calls = (
        r"\bfetch\(|XMLHttpRequest|WebSocket|EventSource|sendBeacon|importScripts|"
        r"\bimport\(|new (Shared)?Worker|</script"
    )
    for text in (
        bundle(),
        files("trajcage.plots").joinpath("cage_plane.js").read_text(),
    ):
        assert re.search(calls, text) is None
        # the name of a namespace is no address that anything is fetched from
        assert set(re.findall(r"\w+://[\w./]+", text)) <= {
            "http://www.w3.org/1999/xhtml"
        }
    assert len(bundle()) < 1_000_000


def test_the_wheel_takes_every_file_of_the_package():
    # hatchling leaves out what version control ignores, and what it is told to
    settings = tomllib.loads((ROOT / "pyproject.toml").read_text())
    wheel = settings["tool"]["hatch"]["build"]["targets"]["wheel"]
    assert wheel == {"packages": ["trajcage"]}
    ignored = (ROOT / ".gitignore").read_text().split("\n")
    assert not [line for line in ignored if line.endswith((".js", "plots/"))]
