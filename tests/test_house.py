"""The house: imports run one way, names are documented, what the README says is true."""

from __future__ import annotations

import ast
import doctest
import importlib
import inspect
import os
import re
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest

import steerkit
from steerkit import Causes, Controller, Phase, Slowing, compiled

ROOT = Path(__file__).parent.parent
PACKAGE = ROOT / "src" / "steerkit"
README = (ROOT / "README.md").read_text()
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text()

ORDER = re.findall(r"^      (\w+)\.py", DEVELOPERS, re.M)
MODULES = [importlib.import_module(f"steerkit.{name}") for name in ORDER if name != "__init__"]


def imported(path: Path) -> set[str]:
    """Return the modules of the package that a file imports anywhere."""
    found = set()
    for node in ast.walk(ast.parse(path.read_text())):
        if isinstance(node, ast.ImportFrom) and node.module == "steerkit":
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom) and (node.module or "").startswith("steerkit."):
            found.add(node.module.split(".")[1])
    return found


def test_the_house_lists_every_file():
    assert sorted(ORDER) == sorted(path.stem for path in PACKAGE.glob("*.py"))


@pytest.mark.parametrize("name", [name for name in ORDER if name != "__init__"])
def test_imports_run_one_way(name):
    above = set(ORDER[: ORDER.index(name)])
    assert imported(PACKAGE / f"{name}.py") <= above


def test_only_one_file_knows_the_compiler():
    assert [path.name for path in PACKAGE.glob("*.py") if re.search(r"\bnumba\.|import numba", path.read_text())] == ["compiled.py"]


def test_nothing_but_numpy_is_imported_besides_the_standard_library():
    known = {"steerkit", "numpy", "__future__"} | set(sys.stdlib_module_names)
    for path in PACKAGE.glob("*.py"):
        for node in ast.walk(ast.parse(path.read_text())):
            names = (
                [a.name for a in node.names]
                if isinstance(node, ast.Import)
                else [node.module]
                if isinstance(node, ast.ImportFrom)
                else []
            )
            assert {(name or "").split(".")[0] for name in names} <= known, path.name


UNITS = r"(m|s|rad|m/s|rad/s|m/s\^2|1/s|counts|no unit)"


def documented(module):
    for name in getattr(module, "__all__", []):
        thing = getattr(module, name)
        yield name, thing
        if inspect.isclass(thing):
            yield from (
                (f"{name}.{key}", one) for key, one in vars(thing).items() if inspect.isfunction(one) and not key.startswith("_")
            )


@pytest.mark.parametrize("module", MODULES, ids=lambda module: module.__name__.split(".")[1])
def test_every_public_name_is_documented_each_parameter_with_its_unit(module):
    for name, thing in documented(module):
        text = inspect.getdoc(thing) or ""
        assert text, name
        if not inspect.isfunction(thing) or "." in name:
            continue
        for parameter in inspect.signature(thing).parameters:
            assert re.search(rf"^(\w+, )*{parameter}(, \w+)* : ", text, re.M), f"{name}: {parameter}"
        for line in re.findall(r"^[\w, ]+ : \(?float.*", text, re.M):
            assert re.search(rf", {UNITS}(,|$)", line), f"{name}: {line}"


@pytest.mark.parametrize("module", MODULES, ids=lambda module: module.__name__.split(".")[1])
def test_modules_with_doors_say_which(module):
    inner = (
        *("checks", "compiled", "reading", "way_ahead", "step_fit", "gain_reasons", "prediction", "approach", "schedule"),
        *("wheel_grid", "settings", "memory_row", "intake", "answering", "step"),
    )
    assert hasattr(module, "__all__") != (module.__name__.split(".")[1] in inner)


@pytest.mark.parametrize("name", ["Platform", "Measurement", "Controller"])
def test_every_field_and_argument_is_documented(name):
    thing = getattr(steerkit, name)
    for parameter in inspect.signature(thing).parameters:
        assert re.search(rf"^(\w+, )*{parameter}(, \w+)* : ", inspect.getdoc(thing), re.M), parameter


@pytest.mark.parametrize("module", [*MODULES], ids=lambda module: module.__name__.split(".")[1])
def test_examples_in_docstrings_run(module):
    if compiled.ON:
        assert doctest.testmod(module).failed == 0


def test_the_face_names_what_it_gives():
    assert sorted(steerkit.HOMES) == sorted(steerkit.__all__) == dir(steerkit)
    for name in steerkit.__all__:
        assert getattr(steerkit, name).__module__ == f"steerkit.{steerkit.HOMES[name]}"
    with pytest.raises(AttributeError, match="has no attribute 'Wheel'"):
        steerkit.Wheel  # noqa: B018


def blocks(kind: str) -> list[str]:
    return re.findall(rf"```{kind}\n(.*?)```", README, re.S)


def test_the_readme_s_ten_lines_run(capsys):
    exec(compile(blocks("python")[0], "README.md", "exec"), {})
    assert re.match(r"\d+\.\d s, arrived: ", capsys.readouterr().out)


def test_the_readme_s_print_is_what_is_printed():
    names: dict[str, object] = {}
    exec(compile(blocks("python")[0].split("memory, pose")[0], "README.md", "exec"), names)
    assert str(names["controller"]) + "\n" == blocks("text")[0]


def test_every_phase_and_cause_has_its_row_in_the_readme():
    for one in [*Phase, *Causes]:
        assert re.search(rf"^\|.*\b{one.name}\b.*\|", README, re.M), one
    assert {one.name for one in Slowing} <= set(re.findall(r"\b[A-Z_]+\b", README))


def test_error_texts_quoted_in_the_readme_are_real():
    from test_bad_calls import BAD_CALLS

    texts = [row[3] for row in BAD_CALLS]
    flat = re.sub(r"\s+", " ", README)
    quoted = re.findall(r"`([a-z_]+=[^`]* (?:must be|no gain)[^`]*)`", flat)
    assert len(quoted) >= 3
    assert set(quoted) <= set(texts)


def test_python_floor_and_versions_agree():
    project = tomllib.loads((ROOT / "pyproject.toml").read_text())
    floor = project["project"]["requires-python"].removeprefix(">=")
    assert f"({floor} or later)" in README
    assert project["tool"]["mypy"]["python_version"] == floor
    assert project["tool"]["ruff"]["target-version"] == "py" + floor.replace(".", "")
    assert project["project"]["version"] == steerkit.__version__
    assert sorted(re.split(r"[>=]", one)[0] for one in project["project"]["dependencies"]) == ["numba", "numpy"]
    assert set(project["project"]["optional-dependencies"]) == {"proving", "plot", "test", "bench"}


def test_readme_commands_need_nothing_but_python():
    commands = [line for block in blocks("sh") for line in block.splitlines()]
    assert len(commands) == 2
    for command in commands:
        assert command.startswith("python3 -m venv .venv && .venv/bin/pip install -e '.[")
    assert (
        commands[1] in (ROOT / ".ci" / "run").read_text()
        or "grep -m1 -- '-m pytest' README.md" in (ROOT / ".ci" / "run").read_text()
    )
    assert os.access(ROOT / ".ci" / "run", os.X_OK)


@pytest.mark.skipif(not compiled.ON, reason="once is enough")
def test_the_first_drive_arrives_everywhere_and_never_beats_the_bound(tmp_path):
    script = tmp_path / "first_drive.py"
    script.write_text((ROOT / "docs" / "first_drive.py").read_text())
    run = subprocess.run([sys.executable, "-W", "error", str(script)], capture_output=True, text=True, timeout=120, check=False)
    assert run.returncode == 0, run.stderr
    rows = re.findall(r"^\d  .*?(\d+\.\d) s +(\d+\.\d) s .*?(\d\.\d+) m ", run.stdout, re.M)
    assert len(rows) == 5
    for time, shortest, off in rows:
        assert float(shortest) <= float(time)
        assert float(off) <= 0.25
    assert script.with_suffix(".png").stat().st_size > 20_000


def test_a_controller_says_that_it_is_unguarded():
    assert "nothing here looks for obstacles" in inspect.getsource(Controller.__str__)
