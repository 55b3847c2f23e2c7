"""Small made-up canonical scenes on all kinds of grids, with fields that tell where they were taken."""

import numpy as np
import pyproj
import xarray as xr

from chansim.scene.grids import grid_mapping_variable

HEIGHT = np.array([30e3, 20e3, 15e3, 12e3, 10e3, 8e3, 6e3, 4e3, 3e3, 2e3, 1e3, 500.0, 200.0, 50.0])  # m
PRESSURE = 101325.0 * np.exp(-HEIGHT / 7400.0)  # Pa
LAMBERT = pyproj.CRS.from_proj4("+proj=lcc +lat_1=50 +lat_2=50 +lat_0=50 +lon_0=10 +R=6371229")


def grid_of(kind, step=0.25):
    """Dims, latitude, longitude, axes, CRS of a grid around 50 N, 10 E with a step of about `step` degrees."""
    if kind == "regular":
        y, x = np.arange(58.0, 42.0 - 1e-9, -step), np.arange(-2.0, 22.0 + 1e-9, step)
        latitude, longitude = np.meshgrid(y, x, indexing="ij")
        return ("y", "x"), latitude, longitude, {"y": y, "x": x}, None
    y, x = np.arange(-0.8e6, 0.8e6, step * 111e3), np.arange(-0.8e6, 0.8e6, step * 111e3)
    longitude, latitude = pyproj.Proj(LAMBERT)(*np.meshgrid(x, y), inverse=True)
    if kind == "lambert":
        return ("y", "x"), latitude, longitude, {"y": y, "x": x}, LAMBERT
    if kind == "curvilinear":
        return ("y", "x"), latitude, longitude, {}, None
    return ("cell",), latitude.ravel(), longitude.ravel(), {}, None


def scene_on(kind="regular", step=0.25, height=None, ground=0.0):
    """A scene whose temperature and specific humidity say where they stand.

    temperature = 250 + latitude, specific_humidity = (20 + longitude) / 1e4, linear, so that interpolation keeps
    them; height : function (latitude, longitude) -> array added to HEIGHT [m]; ground [m]
    """
    dims, latitude, longitude, axes, crs = grid_of(kind, step)
    shape = (HEIGHT.size, *latitude.shape)
    heights = np.broadcast_to(HEIGHT.reshape(-1, *[1] * latitude.ndim), shape)
    if height is not None:
        heights = heights + height(latitude, longitude)
    on_levels = ("level", *dims)
    scene = xr.Dataset(
        {
            "pressure": ("level", PRESSURE),
            "temperature": (on_levels, np.broadcast_to(250.0 + latitude, shape).copy()),
            "specific_humidity": (on_levels, np.broadcast_to((20.0 + longitude) / 1e4, shape).copy()),
            "cloud_ice": (on_levels, np.zeros(shape, "f4")),
            "height": (on_levels, heights.copy()),
            "surface_pressure": (dims, np.full(latitude.shape, 101325.0)),
            "skin_temperature": (dims, 250.0 + latitude),
            "orography": (dims, np.full(latitude.shape, float(ground))),
            "surface_class": (dims, np.where(longitude > 10.0, 1.0, 0.0)),
            "column_valid": (dims, np.ones(latitude.shape, dtype=bool)),
        },
        attrs={"model": "invented"},
    )
    scene = scene.assign_coords(latitude=(dims, latitude), longitude=(dims, longitude))
    scene = scene.assign_coords(time=np.datetime64("2020-07-15T12:00", "ns"))
    for dim, values in axes.items():
        scene.coords[dim] = (dim, values)
    if crs is not None:
        scene["grid_mapping"] = grid_mapping_variable(crs)
    return scene


def places_in(scene):
    """Latitude and longitude that the fields of `scene_on` tell [degrees]."""
    return scene["temperature"] - 250.0, scene["specific_humidity"] * 1e4 - 20.0
