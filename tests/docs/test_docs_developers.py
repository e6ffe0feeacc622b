"""DEVELOPERS.md against the project: dependencies, folders, version."""

import re
import tomllib
from pathlib import Path

import afterkick
from docs.markdown import TOP, document, names, section, tables

DEVELOPERS = document("DEVELOPERS.md")
PROJECT = tomllib.loads(document("pyproject.toml"))


def package(requirement):
    return re.match(r"[A-Za-z0-9_-]+", requirement)[0]


def test_every_dependency_and_where_it_is_needed():
    project = PROJECT["project"]
    needed = {package(text): "run time" for text in project["dependencies"]}
    needed |= {package(text): "build" for text in PROJECT["build-system"]["requires"]}
    for extra, requirements in project["optional-dependencies"].items():
        for text in requirements:
            needed.setdefault(package(text), "")
            needed[package(text)] += f"`{extra}`"
    rows = {names(row[0])[0]: row for row in tables(section(DEVELOPERS, "## Dependencies"))[0]}
    assert sorted(rows) == sorted(needed)
    for name, where in needed.items():
        found = "".join(f"`{extra}`" for extra in names(rows[name][1])) or rows[name][1]
        assert found == where, name
        assert rows[name][2], name


def test_every_part_of_the_package():
    listed = {name.rstrip("/") for row in tables(section(DEVELOPERS, "## Architecture"))[0] for name in names(row[0])}
    package_folder = TOP / "src" / "afterkick"
    parts = {path.name for path in package_folder.iterdir() if path.is_dir() and path.name != "__pycache__"}
    parts |= {path.name for path in package_folder.glob("*.py") if not path.name.startswith("__")}
    assert listed == parts


def test_what_is_named_exists():
    for name in names(section(DEVELOPERS, "## How to add")):
        if re.fullmatch(r"[a-z_]+/[a-z_.]+\.(py|j2)", name):
            roots = (TOP / "src" / "afterkick", TOP / "templates", TOP)
            assert any(Path(root, name).exists() for root in roots), name


def test_version():
    assert PROJECT["project"]["version"] == afterkick.__version__
    assert f"### {afterkick.__version__}\n" in section(DEVELOPERS, "## Changes")
