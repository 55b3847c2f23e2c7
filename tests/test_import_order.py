"""The order in which PROJ and ecCodes load: each case in a process of its own.

With the wheels of 2026 a process that loads ecCodes before PROJ aborts; chansim loads PROJ first.
"""

import pkgutil
import re
import subprocess
import sys
from pathlib import Path

import pytest

import chansim

SUBMODULES = sorted(
    module.name
    for module in pkgutil.walk_packages(chansim.__path__, "chansim.")
    if not any(part.startswith("_") for part in module.name.split(".")[1:])
)
# uses both libraries, so that a bad order aborts rather than waits for the end of the process
USE_BOTH = """
import cfgrib, eccodes, cartopy.crs, pyproj
handle = eccodes.codes_grib_new_from_samples("GRIB2")
eccodes.codes_get_values(handle)
pyproj.Transformer.from_crs(4326, 3857).transform(50.0, 8.0)
cartopy.crs.Geostationary().transform_point(8.0, 50.0, cartopy.crs.PlateCarree())
print("fine")
"""


def run(code):
    return subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, timeout=300)


def assert_fine(code):
    result = run(code)
    missing = re.search(r"ModuleNotFoundError: No module named '(\w+)", result.stderr)
    if missing and missing.group(1) != "chansim":
        pytest.skip(f"{missing.group(1)} is not installed")
    assert result.returncode == 0, f"exit {result.returncode}\n{result.stderr[-2000:]}"
    assert result.stdout.strip().endswith("fine")


@pytest.mark.parametrize("first", ["cfgrib", "eccodes", "cartopy.crs", "xarray", "pyproj"])
def test_any_library_after_chansim(first):
    assert_fine(f"import chansim\nimport {first}\n{USE_BOTH}")


@pytest.mark.parametrize("module", SUBMODULES)
def test_any_submodule_first(module):
    assert_fine(f"import {module}\n{USE_BOTH}")


def test_grib_through_xarray(tmp_path):
    from scene_samples import basic_grib_messages, write_grib

    file = tmp_path / "small.grib2"
    write_grib(file, basic_grib_messages()[:4])
    assert_fine(
        "import chansim, xarray\n"
        f'dataset = xarray.open_dataset({str(file)!r}, engine="cfgrib", backend_kwargs={{"indexpath": ""}})\n'
        f'assert float(dataset["t"].mean()) > 200.0\n{USE_BOTH}'
    )


def test_scene_from_grib_then_a_map_projection(tmp_path):
    from scene_samples import basic_grib_messages, write_grib

    file = tmp_path / "small.grib2"
    write_grib(file, basic_grib_messages())
    assert_fine(f"from chansim.scene.reading import open_scene\nopen_scene({str(file)!r})\n{USE_BOTH}")


def test_pyproj_is_the_first_thing_chansim_imports():
    source = (Path(chansim.__file__)).read_text()
    statements = [line for line in source.splitlines() if line.startswith(("import ", "from "))]
    assert statements[0].startswith("from chansim import _import_order")
    order = (Path(chansim.__file__).parent / "_import_order.py").read_text()
    assert [line for line in order.splitlines() if line.startswith(("import ", "from "))][0].startswith("import pyproj")
