"""Draws what the demo scene holds: `python demo_scenes/draw_fields.py` writes fields.png beside itself."""

from pathlib import Path

import numpy as np
import xarray as xr
from make_demo_scene import DEMO_FILE, layer_mass
from matplotlib.figure import Figure

import chansim  # noqa: F401  (before xarray loads ecCodes)
from chansim.scene.humidity import relative_humidity_from_specific_humidity


def panels(scene):
    """(title, field, colormap, range) of each panel."""
    pressure = 100.0 * scene["pressure"].values.astype(float)[:, None, None]
    mass = layer_mass(pressure, scene["surface_pressure"].values.astype(float))
    level = scene.sel(pressure=400)
    moisture = relative_humidity_from_specific_humidity(
        level["specific_humidity"].astype(float), level["temperature"].astype(float), 4e4
    )
    paths = {n: 1e3 * np.sum(scene[n].values * mass, axis=0) for n in ("cloud_liquid", "cloud_ice")}
    return (
        ("log10 of ice water path [g m-2]", np.log10(paths["cloud_ice"] + 0.1), "Blues_r", (-1, 3.5)),
        ("log10 of liquid water path [g m-2]", np.log10(paths["cloud_liquid"] + 0.1), "Blues_r", (-1, 3.5)),
        ("relative humidity at 400 hPa [%]", 100.0 * moisture, "cividis", (0, 100)),
        ("skin temperature [K]", scene["skin_temperature"], "viridis", (225, 305)),
        ("orography [m]", scene["orography"], "cividis", (0, 5000)),
        ("surface class (0 sea, 1 land, 2 desert, 3 snow)", scene["surface_class"], "viridis", (0, 4)),
    )


def main(target=Path(__file__).parent / "fields.png"):
    """Writes the picture; returns its path."""
    with xr.open_dataset(DEMO_FILE) as scene:
        scene = scene.load()
    figure = Figure(figsize=(12, 7), layout="constrained")
    for axes, (title, field, colours, limits) in zip(figure.subplots(2, 3).ravel(), panels(scene)):
        image = axes.imshow(
            field, origin="lower", extent=(10, 70, -5, 45), cmap=colours, vmin=limits[0], vmax=limits[1]
        )
        axes.contour(
            scene["longitude"], scene["latitude"], scene["land_fraction"], [0.5], colors="orange", linewidths=0.6
        )
        axes.set_title(title, fontsize=9)
        axes.tick_params(labelsize=7)
        figure.colorbar(image, ax=axes, shrink=0.75).ax.tick_params(labelsize=7)
    figure.savefig(target, dpi=60, pil_kwargs={"optimize": True})
    return target


if __name__ == "__main__":
    print(main())
