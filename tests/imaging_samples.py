"""Made-up results for the tests of the maps: what `chansim.simulate` returns, from analytic fields."""

import numpy as np
import pyproj
import xarray as xr

SPHERE = 6371229.0  # m

# CF grid mappings: parameters, x and y axes [m, or degrees]
MAPPINGS = {
    "lambert conformal": (
        {"grid_mapping_name": "lambert_conformal_conic", "standard_parallel": [46.0, 60.0], "earth_radius": SPHERE,
         "longitude_of_central_meridian": 10.0, "latitude_of_projection_origin": 50.0,
         "false_easting": 0.0, "false_northing": 0.0},
        (-1.8e6, 1.8e6), (-1.5e6, 1.5e6),
    ),
    "polar stereographic": (
        {"grid_mapping_name": "polar_stereographic", "latitude_of_projection_origin": 90.0, "standard_parallel": 60.0,
         "straight_vertical_longitude_from_pole": -30.0, "false_easting": 0.0, "false_northing": 0.0,
         "semi_major_axis": 6378137.0, "inverse_flattening": 298.257223563},
        (-3.5e6, 3.5e6), (-4.5e6, 1.5e6),
    ),
    "mercator": (
        {"grid_mapping_name": "mercator", "longitude_of_projection_origin": 170.0, "standard_parallel": 20.0,
         "false_easting": 0.0, "false_northing": 0.0, "earth_radius": SPHERE},
        (-3e6, 5e6), (-4.5e6, -1e6),
    ),
    "rotated pole": (
        {"grid_mapping_name": "rotated_latitude_longitude", "grid_north_pole_latitude": 39.25,
         "grid_north_pole_longitude": -162.0, "north_pole_grid_longitude": 0.0, "earth_radius": SPHERE},
        (-18.0, 18.0), (-16.0, 14.0),
    ),
    "geostationary": (
        {"grid_mapping_name": "geostationary", "perspective_point_height": 35786023.0, "sweep_angle_axis": "y",
         "longitude_of_projection_origin": 40.0, "latitude_of_projection_origin": 0.0, "false_easting": 0.0,
         "false_northing": 0.0, "semi_major_axis": 6378137.0, "inverse_flattening": 298.257222096},
        (-2.5e6, 3.5e6), (0.5e6, 4.5e6),
    ),
    "latitude longitude": (
        {"grid_mapping_name": "latitude_longitude", "earth_radius": SPHERE}, (-20.0, 40.0), (30.0, 72.0),
    ),
    "across the date line": (
        {"grid_mapping_name": "latitude_longitude", "earth_radius": SPHERE}, (150.0, 215.0), (-55.0, -15.0),
    ),
}  # fmt: skip
CHANNELS = {"wv063": (6.3, "water_vapour"), "ir104": (10.45, "window"), "sw038": (3.85, "shortwave")}


def places(mapping, x, y):
    """Longitude and latitude of projection coordinates by pyproj alone; NaN in space."""
    crs = pyproj.CRS.from_cf(mapping)
    geographic = crs.source_crs if crs.is_derived and crs.source_crs is not None else crs.geodetic_crs
    if mapping["grid_mapping_name"] == "latitude_longitude":
        return np.meshgrid(x, y)
    longitude, latitude = pyproj.Transformer.from_crs(crs, geographic, always_xy=True).transform(*np.meshgrid(x, y))
    seen = np.isfinite(longitude) & np.isfinite(latitude)
    return np.where(seen, longitude, np.nan), np.where(seen, latitude, np.nan)


def make_result(kind="latitude longitude", shape=(31, 41), channels=("wv063", "ir104"), values=None, upside="north up"):
    """A result on one of the grids of `MAPPINGS`.

    values : array (y, x) or None: 230 K on one side to 290 K on the other
    upside : "north up" has the first row at the largest y, "south up" at the smallest
    """
    mapping, x_edges, y_edges = MAPPINGS[kind]
    x, y = np.linspace(*x_edges, shape[1]), np.linspace(*y_edges, shape[0])
    y = y[::-1] if upside == "north up" else y
    longitude, latitude = places(mapping, x, y)
    if values is None:
        values = np.broadcast_to(np.linspace(230.0, 290.0, shape[1]), shape)
    crs = pyproj.CRS.from_cf(mapping)
    bt = np.stack([values + 2.0 * n for n, _ in enumerate(channels)]).astype(np.float32)
    result = xr.Dataset(
        {
            "brightness_temperature": (("channel", "y", "x"), bt, {"units": "K", "grid_mapping": "grid_mapping"}),
            "grid_mapping": ((), np.int32(0), {**crs.to_cf(), **mapping}),
        },
        coords={
            "channel": list(channels),
            "channel_kind": ("channel", [CHANNELS[c][1] for c in channels]),
            "central_wavenumber": ("channel", [1e4 / CHANNELS[c][0] for c in channels], {"units": "cm-1"}),
            "latitude": (("y", "x"), latitude), "longitude": (("y", "x"), longitude),
            "x": ("x", x), "y": ("y", y), "time": np.datetime64("2026-01-21T06:30", "ns"),
        },
        attrs={"model": "Quill 4", "imager": "tarn", "view": "nadir", "source_file": "somewhere/quill.nc"},
    )  # fmt: skip
    return result
