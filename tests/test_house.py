"""The walls of the house stand: who may import whom, how fast the door opens, and what the tree may not contain."""

from __future__ import annotations

import ast
import re
import subprocess
import sys

import pytest

from tests.conftest import ROOT

ROOMS = {
    "planner": ("sky", "events", "sequence", "capture", "cli"),
    "imaging": ("frames", "stars", "discs", "track", "compose"),
}


def imports_of(path):
    tree = ast.parse(path.read_text(encoding="utf-8"))
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            for alias in node.names:
                yield alias.name
        elif isinstance(node, ast.ImportFrom) and node.module:
            yield node.module
            for alias in node.names:
                yield f"{node.module}.{alias.name}"


def modules(package):
    return sorted((ROOT / package).rglob("*.py"))


def test_planner_knows_nothing_of_imaging_but_at_the_front_door():
    offenders = [
        f"{path.relative_to(ROOT)} imports {name}"
        for path in modules("planner")
        if "cli" not in path.relative_to(ROOT).parts
        for name in imports_of(path)
        if name.split(".")[0] == "imaging"
    ]
    assert not offenders


@pytest.mark.parametrize("package", ROOMS)
def test_a_room_imports_only_rooms_to_its_left(package):
    order = ROOMS[package]
    offenders = []
    for path in modules(package):
        parts = path.relative_to(ROOT / package).parts
        if parts[0] not in order:
            continue
        for name in imports_of(path):
            pieces = name.split(".")
            if pieces[0] == package and len(pieces) > 1 and pieces[1] in order:
                if order.index(pieces[1]) > order.index(parts[0]):
                    offenders.append(f"{path.relative_to(ROOT)} imports {name}")
    assert not offenders


def test_no_module_of_planner_or_imaging_imports_the_front_door():
    offenders = [
        f"{path.relative_to(ROOT)} imports {name}"
        for package in ROOMS
        for path in modules(package)
        if "cli" not in path.relative_to(ROOT).parts
        for name in imports_of(path)
        if name.startswith("planner.cli")
    ]
    assert not offenders


def test_renderer_and_measuring_rooms_share_no_code_but_the_planner():
    offenders = []
    for path in modules("imaging"):
        relative = path.relative_to(ROOT / "imaging")
        renders = relative.parts[0] == "frames" and relative.name.startswith("render")
        for name in imports_of(path):
            if not name.startswith("imaging."):
                continue
            to_renderer = re.match(r"imaging\.frames\.render", name)
            if renders and not to_renderer:
                offenders.append(f"{relative} imports {name}")
            if not renders and to_renderer:
                offenders.append(f"{relative} imports {name}")
    assert not offenders


def test_help_answers_in_under_a_third_of_a_second_of_cpu():
    """A property of the import graph, not of the machine's speed: no heavy library is loaded for --help."""
    heavy = {
        "numpy",
        "scipy",
        "astropy",
        "matplotlib",
        "pydantic",
        "skyfield",
        "cv2",
        "bokeh",
        "yaml",
        "rich.progress",
    }
    code = (
        "import sys, planner.cli.main as m; code = m.run_with(['--help']);"
        f"print('LOADED', sorted({heavy!r} & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert "LOADED []" in done.stdout


def test_tree_names_no_machine_path_and_no_registry_host():
    listed = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True)
    if listed.returncode:
        pytest.skip("not a git checkout: nothing to list")
    pattern = re.compile(r"(?<![\w.])/(work|farm|root|home/\w+)/|pypi\.org|npmjs|pythonhosted")
    offenders = []
    for name in listed.stdout.split():
        path = ROOT / name
        if (
            path.suffix in {".py", ".md", ".toml", ".yaml", ".yml", ".txt", ".csv", ".json", ""}
            and path.is_file()
        ):
            if name == "tests/test_house.py":
                continue
            text = path.read_text(encoding="utf-8", errors="replace")
            offenders += [f"{name}: {match.group(0)}" for match in pattern.finditer(text)]
    assert not offenders
