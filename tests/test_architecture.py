"""Imports point along the flow, the package carries its data, nothing is half done."""

import ast
import re
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
PACKAGE = ROOT / "chansim"
# who may import whom (besides itself and the base modules); everything else points backward
ALLOWED = {
    "scene": set(),
    "view": {"scene"},
    "spectra": set(),
    "channels": {"spectra"},
    "optics": set(),
    "transfer": {"optics"},
    "imaging": {"scene", "channels"},
}
BASE = {"constants", "errors", "planck", "_version", "_import_order"}


def imports(path):
    for node in ast.walk(ast.parse(path.read_text())):
        if isinstance(node, ast.ImportFrom) and node.module and node.module.startswith("chansim"):
            parts = node.module.split(".")
            names = [parts[1]] if len(parts) > 1 else [alias.name for alias in node.names]
            yield from names
        elif isinstance(node, ast.Import):
            yield from (a.name.split(".")[1] for a in node.names if a.name.startswith("chansim."))


@pytest.mark.parametrize("folder", sorted(ALLOWED))
def test_imports_point_along_the_flow(folder):
    for path in (PACKAGE / folder).glob("*.py"):
        wrong = set(imports(path)) - ALLOWED[folder] - BASE - {folder}
        assert not wrong, f"{path.relative_to(ROOT)} imports {wrong}"


def test_xarray_stays_outside_the_solver():
    for path in (PACKAGE / "transfer").glob("*.py"):
        assert "xarray" not in path.read_text(), path


def test_top_level_of_the_repository():
    allowed = {"README.md", "DEVELOPERS.md", "pyproject.toml", "chansim", "srf", "tests", "demo_scenes", "docs"}
    import subprocess

    listed = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True)
    if listed.returncode:
        pytest.skip("not a git checkout")
    top = {line.split("/")[0] for line in listed.stdout.splitlines()}
    assert {name for name in top if not name.startswith(".")} <= allowed


def test_files_stay_small():
    for path in [*PACKAGE.rglob("*"), *(ROOT / "tests").rglob("*")]:
        if path.is_file():
            assert path.stat().st_size < 25e6, path


def test_readme_leads_to_existing_pages():
    text = (ROOT / "README.md").read_text()
    for target in re.findall(r"\]\((docs/[^)#]+)\)", text):
        assert (ROOT / target).exists(), target


def test_ci_runs_the_commands_of_the_readme():
    command = 'pip install --quiet ".[test]" && python -m pytest -q'
    assert command.replace(" --quiet", "") in (ROOT / "README.md").read_text()
    assert command in (ROOT / ".ci" / "run").read_text()
