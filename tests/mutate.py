"""Plant random faults in the sources, one at a time, and say which ones no test catches.

    python tests/mutate.py --count 120 --seed 1

A fault is a changed sign, operator, comparison, constant or condition, or a dropped line, in a copy of the project. Quick tests run
first, without the compiler; what they miss meets the slow ones. A fault that ends in an error or a hang counts as caught.
"""

from __future__ import annotations

import argparse
import ast
import copy
import os
import random
import shutil
import subprocess
import sys
import tempfile
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

ROOT = Path(__file__).parent.parent
FILES = (
    *(
        "angles",
        "kinematics",
        "heading",
        "approach",
        "schedule",
        "wheel_grid",
        "answering",
        "limits",
        "prediction",
        "intake",
        "step",
    ),
    *("windows", "gain_limits", "margins", "sizing", "shortest", "way_ahead", "travel_time", "settings"),
)
ASKED = ("angles", "kinematics", "heading", "approach", "schedule", "wheel_grid", "answering")
QUICK = ["test_angles.py", "test_kinematics.py", "test_limits.py", "test_controller.py", "test_properties.py", "test_heading.py"]
FIRST = {  # else test_heading.py
    "angles": ["test_angles.py"],
    "kinematics": ["test_kinematics.py"],
    "limits": ["test_limits.py"],
    **{name: ["test_schedule.py"] for name in ("schedule", "wheel_grid", "answering")},
    **{name: ["test_margins.py", "test_sizing.py"] for name in ("windows", "gain_limits", "margins", "sizing")},
    **{name: [f"test_{name}.py", "test_travel_time.py"] for name in ("shortest", "way_ahead", "travel_time")},
}
SLOW = [
    "test_schedule.py",
    "test_ride_schedule.py",
    "test_sizing.py",
    "test_window.py",
    "test_bad_calls.py",
    "test_ride.py",
    "test_house.py",
]

SWAPS = {
    ast.Add: ast.Sub,
    ast.Sub: ast.Add,
    ast.Mult: ast.Div,
    ast.Div: ast.Mult,
    ast.Lt: ast.LtE,
    ast.LtE: ast.Lt,
    ast.Gt: ast.GtE,
    ast.GtE: ast.Gt,
    ast.And: ast.Or,
    ast.Or: ast.And,
    ast.Eq: ast.NotEq,
    ast.NotEq: ast.Eq,
    ast.USub: ast.UAdd,
}
FLIPS = {ast.Lt: ast.Gt, ast.LtE: ast.GtE, ast.Gt: ast.Lt, ast.GtE: ast.LtE}


def places(tree: ast.AST) -> list[tuple[str, int]]:
    """Return every place that can be mutated as (kind, index in the walk), annotations and docstrings aside."""
    found = []
    idle = set()
    for node in ast.walk(tree):
        for part in [*getattr(node, "decorator_list", []), getattr(node, "returns", None), getattr(node, "annotation", None)]:
            if part is not None:
                idle |= {id(one) for one in ast.walk(part)}
    for index, node in enumerate(ast.walk(tree)):
        if id(node) in idle:
            continue
        if isinstance(node, (ast.BinOp, ast.BoolOp)) and type(node.op) in SWAPS:
            found.append(("operator", index))
        elif isinstance(node, ast.UnaryOp) and isinstance(node.op, (ast.USub, ast.Not)):
            found.append(("sign", index))
        elif isinstance(node, ast.Compare) and type(node.ops[0]) in SWAPS:
            found.append(("comparison", index))
        elif isinstance(node, ast.Constant) and type(node.value) in (int, float):
            found.append(("constant", index))
        elif isinstance(node, (ast.Assign, ast.AugAssign)) and index > 0:
            found.append(("dropped line", index))
    return found


def mutated(tree: ast.Module, kind: str, index: int, rng: random.Random) -> ast.Module:
    """Return a copy of the tree with one fault."""
    tree = copy.deepcopy(tree)
    node = list(ast.walk(tree))[index]
    if kind == "operator":
        node.op = SWAPS[type(node.op)]()
    elif kind == "sign":
        node.op = ast.UAdd()
    elif kind == "comparison":
        table = FLIPS if type(node.ops[0]) in FLIPS and rng.random() < 0.5 else SWAPS
        node.ops[0] = table[type(node.ops[0])]()
    elif kind == "constant":
        value = node.value
        node.value = (
            rng.choice([value + 1, value * 1.1 if value else 1.0, -value if value else 1]) if type(value) is float else value + 1
        )
    else:
        for parent in ast.walk(tree):
            for field in ("body", "orelse"):
                lines = getattr(parent, field, None)
                if isinstance(lines, list) and node in lines:
                    lines[lines.index(node)] = ast.copy_location(ast.Pass(), node)
    return ast.fix_missing_locations(tree)


def draw(count: int, only: list[str], rng: random.Random) -> list[tuple[str, str, int, str, str]]:
    """Return mutants as (file, kind, line, the line as it was, the new text of the file), none twice."""
    trees = {name: ast.parse((ROOT / "src" / "steerkit" / f"{name}.py").read_text()) for name in only}
    pool = [(name, kind, index) for name, tree in trees.items() for kind, index in places(tree)]
    rng.shuffle(pool)
    chosen = []
    for name, kind, index in pool:
        tree = trees[name]
        line = list(ast.walk(tree))[index].lineno
        text = ast.unparse(mutated(tree, kind, index, rng))
        if text != ast.unparse(tree):
            source = (ROOT / "src" / "steerkit" / f"{name}.py").read_text().splitlines()[line - 1].strip()
            chosen.append((name, kind, line, source, text))
        if len(chosen) == count:
            break
    return chosen


def caught_by(mutant: tuple[str, str, int, str, str]) -> str:
    """Return the name of the lane that caught the mutant, or an empty text."""
    name, _, _, _, text = mutant
    with tempfile.TemporaryDirectory() as place:
        copied = Path(place)
        for part in ("src", "tests", "docs", ".ci"):
            shutil.copytree(ROOT / part, copied / part, ignore=shutil.ignore_patterns("__pycache__", "*.png"))
        for part in ("README.md", "DEVELOPERS.md", "pyproject.toml"):
            shutil.copy(ROOT / part, copied / part)
        (copied / "src" / "steerkit" / f"{name}.py").write_text(text)
        clean = {"PYTHONPATH": str(copied / "src"), "STEERKIT_CACHE": str(copied / "cache")}
        plain = {"NUMBA_DISABLE_JIT": "1"}
        first = FIRST.get(name, ["test_heading.py"])
        for lane, files, extra in (("first", first, plain), ("quick", QUICK, plain), ("slow", QUICK + SLOW, {})):
            command = [sys.executable, "-m", "pytest", "-x", "-p", "no:cacheprovider", *(f"tests/{one}" for one in files)]
            command = [one for one in command if not one.startswith("tests/") or (copied / one).exists()]
            try:
                run = subprocess.run(
                    command, cwd=copied, env=os.environ | clean | extra, capture_output=True, timeout=600, check=False
                )
            except subprocess.TimeoutExpired:
                return f"{lane}, hung"
            if run.returncode != 0:
                last = [line for line in run.stdout.decode().splitlines() if line.startswith(("FAILED", "ERROR"))]
                return f"{lane}: {last[0].split(' - ')[0].split('::')[-1] if last else 'broke'}"
    return ""


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--count", type=int, default=120)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--only", nargs="*", default=list(ASKED), choices=FILES)
    parser.add_argument("--workers", type=int, default=2)
    chosen = parser.parse_args()
    trouble = caught_by(("angles", "none", 0, "", (ROOT / "src" / "steerkit" / "angles.py").read_text()))
    if trouble:
        raise SystemExit(f"without any fault the tests fail: {trouble}")
    mutants = draw(chosen.count, chosen.only, random.Random(chosen.seed))
    left = []
    with ThreadPoolExecutor(chosen.workers) as workers:
        for mutant, caught in zip(mutants, workers.map(caught_by, mutants), strict=True):
            name, kind, line, source, _ = mutant
            print(f"{'caught' if caught else 'SURVIVED':8}  {name}.py:{line}  {kind}  {source}  [{caught}]", flush=True)
            if not caught:
                left.append(mutant)
    print(f"{len(mutants) - len(left)} of {len(mutants)} caught")


if __name__ == "__main__":
    main()
