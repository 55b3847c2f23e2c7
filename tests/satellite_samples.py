"""Small satellite pictures for the tests of output, series and maps."""

import functools
from pathlib import Path

import chansim
from chansim.satellite import simulate_on_grid
from chansim.view.fixed_grid import full_disk, sector

DEMO = Path(chansim.__file__).parent / "data" / "demo_scene.nc"
FAST = chansim.Settings(solver="absorbing", subcolumns=1)


@functools.cache
def demo_scene():
    """Every fourth column of the demo scene: 10 to 70 degrees east, 5 south to 45 north."""
    return chansim.open_scene(DEMO).isel(y=slice(None, None, 4), x=slice(None, None, 4))


@functools.cache
def sector_picture(sweep="y"):
    """A sector of 120 km pixels over the demo scene, seen from 40 degrees east; two channels."""
    grid = sector(40.0, 120e3, west=15.0, east=65.0, south=0.0, north=42.0, sweep=sweep)
    return simulate_on_grid(demo_scene(), grid, channels=["wv063", "ir104"], settings=FAST)


@functools.cache
def disk_picture():
    """The full disk in 200 km pixels; one channel."""
    return simulate_on_grid(demo_scene(), full_disk(40.0, 200e3), channels=["ir104"], settings=FAST)
