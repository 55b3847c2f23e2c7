"""One atmosphere, written in six vertical coordinates and on three grids; heights come from a fine integration.

Two kinds of column, over the sea and on a mountain, stand side by side, so that sigma, hybrid sigma-pressure and
hybrid height levels can be the very same levels.
"""

import numpy as np
import pyproj
import xarray as xr

TIME = np.datetime64("2020-07-15T12:00", "ns")
LEVELS = 60
TOP_PRESSURE = 500.0  # Pa
OROGRAPHY = np.array([0.0, 1500.0])  # m
SURFACE_PRESSURE = np.array([101325.0, 84500.0])  # Pa
HALF_SIGMA = np.linspace(0.06, 1.0, LEVELS + 1) ** 2.2  # from the top down
SIGMA = 0.5 * (HALF_SIGMA[1:] + HALF_SIGMA[:-1])
RADIUS = 6371008.8  # m, IUGG mean radius
GAS_CONSTANT, GRAVITY = 8.314462618 / 28.9647e-3, 9.80665
# 2/7, and the ratio of molar masses (CODATA and US Standard Atmosphere 1976)
KAPPA, MASS_RATIO = 2.0 / 7.0, 18.01528 / 28.9647

CRS = pyproj.CRS.from_cf(
    {
        "grid_mapping_name": "lambert_conformal_conic", "standard_parallel": [35.0, 45.0],
        "longitude_of_central_meridian": 5.0, "latitude_of_projection_origin": 40.0, "earth_radius": 6370000.0,
    }
)  # fmt: skip
VERTICALS = ("pressure field", "hybrid sigma-pressure", "sigma", "height", "hybrid height", "native")
GRIDS = ("regular", "lambert", "cells")


def temperature_at(pressure):
    """A smooth column with a tropopause, K."""
    log = np.log(pressure / 1e5)
    return 215.0 + 75.0 / (1.0 + np.exp(-(log + 0.9) / 0.42)) + 8.0 * np.exp(-(((log + 4.5) / 1.2) ** 2))


def humidity_at(pressure):
    """Specific humidity, kg kg-1."""
    return 4e-6 + 0.011 * (pressure / 1e5) ** 3.2


def columns():
    """The two columns: dict of arrays (level, column), top down, and (column,)."""
    pressure = TOP_PRESSURE + SIGMA[:, None] * (SURFACE_PRESSURE - TOP_PRESSURE)
    found = {"pressure": pressure, "temperature": temperature_at(pressure), "humidity": humidity_at(pressure)}
    found["half_pressure"] = TOP_PRESSURE + HALF_SIGMA[:, None] * (SURFACE_PRESSURE - TOP_PRESSURE)
    heights = [fine_heights(pressure[:, c], SURFACE_PRESSURE[c], OROGRAPHY[c]) for c in (0, 1)]
    found["height"] = np.stack(heights, axis=1)
    heights = [fine_heights(found["half_pressure"][:, c], SURFACE_PRESSURE[c], OROGRAPHY[c]) for c in (0, 1)]
    found["half_height"] = np.stack(heights, axis=1)
    found["liquid"] = np.where(np.abs(pressure - 7.5e4) < 4e3, 2e-4, 0.0)
    found["ice"] = np.where(np.abs(pressure - 3.0e4) < 3e3, 2e-5, 0.0)
    return found


def fine_heights(pressure, surface_pressure, ground):
    """Geometric heights of pressures, from 40000 steps of d Phi = R T_v d ln p; geometric by z = R H / (R - H)."""
    log = np.linspace(np.log(surface_pressure), np.log(TOP_PRESSURE * 0.9), 40001)
    p = np.exp(log)
    virtual = temperature_at(p) * (1.0 + (1.0 / MASS_RATIO - 1.0) * humidity_at(p))
    steps = -0.5 * (virtual[1:] + virtual[:-1]) * np.diff(log) * GAS_CONSTANT / GRAVITY
    start = RADIUS * ground / (RADIUS + ground)
    geopotential = start + np.concatenate([[0.0], np.cumsum(steps)])
    at = np.interp(-np.log(pressure), -log, geopotential)
    return RADIUS * at / (RADIUS - at)


def model_file(vertical="pressure field", grid="cells"):
    """The atmosphere as a fresh Dataset.

    vertical : one of VERTICALS; grid : one of GRIDS; six columns, kinds 0 1 0 1 0 1 along the longest dimension
    """
    dims, coords, mapping = _positions(grid)
    kinds = np.arange(6).reshape(2, 3) % 2 if len(dims) == 2 else np.arange(6) % 2
    air = {name: values[..., kinds] for name, values in columns().items()}
    surface = {
        "ps": (SURFACE_PRESSURE[kinds], "surface_air_pressure", "Pa"),
        "orog": (OROGRAPHY[kinds], "surface_altitude", "m"),
        "ts": (np.array([292.0, 281.0])[kinds], "surface_temperature", "K"),
        "sea": (np.zeros(kinds.shape), "land_area_fraction", "1"),
    }
    data = xr.Dataset(coords=coords)
    for name, (values, standard_name, units) in surface.items():
        data[name] = (dims, values, {"standard_name": standard_name, "units": units})
    {"native": _native}.get(vertical, _with_levels)(data, air, dims, vertical)
    if mapping is not None:
        data["crs"] = ((), 0, mapping.to_cf())
        for name in data.data_vars:
            data[name].attrs["grid_mapping"] = "crs"
    return data


def _positions(grid):
    """Dimensions, coordinates and CRS; all within a quarter of a degree of 40 N, 5 E."""
    time = {"time": ((), TIME, {"standard_name": "time"})}
    north = {"units": "degrees_north", "standard_name": "latitude"}
    east = {"units": "degrees_east", "standard_name": "longitude"}
    if grid == "regular":
        lat, lon = np.array([40.05, 39.95]), np.array([4.9, 5.0, 5.1])
        return ("lat", "lon"), {"lat": ("lat", lat, north), "lon": ("lon", lon, east), **time}, None
    x, y = np.array([-1e4, 0.0, 1e4]), np.array([-5e3, 5e3])
    if grid == "lambert":
        axes = (("x", x), ("y", y))
        coords = {n: (n, v, {"units": "m", "standard_name": f"projection_{n}_coordinate"}) for n, v in axes}
        return ("y", "x"), {**coords, **time}, CRS
    longitude, latitude = pyproj.Proj(CRS)(*np.meshgrid(x, y), inverse=True)
    coords = {"clat": ("ncells", latitude.ravel(), north), "clon": ("ncells", longitude.ravel(), east)}
    return ("ncells",), {**coords, **time}, None


def _with_levels(data, air, dims, vertical):
    on_levels = ("lev", *dims)
    fields = {
        "t": ("temperature", "air_temperature", "K"), "hus": ("humidity", "specific_humidity", "kg kg-1"),
        "clw": ("liquid", "mass_fraction_of_cloud_liquid_water_in_air", "kg kg-1"),
        "cli": ("ice", "mass_fraction_of_cloud_ice_in_air", "kg kg-1"),
    }  # fmt: skip
    for name, (key, standard_name, units) in fields.items():
        data[name] = (on_levels, air[key], {"standard_name": standard_name, "units": units})
    lev, attrs = np.arange(1.0, LEVELS + 1.0), {"positive": "down", "axis": "Z"}
    if vertical in ("pressure field", "height"):
        data["pfull"] = (on_levels, air["pressure"], {"standard_name": "air_pressure", "units": "Pa"})
    if vertical == "height":
        attrs = {"standard_name": "height", "units": "m", "positive": "up", "axis": "Z"}
        lev = columns()["height"][:, 0]  # nominal
    elif vertical == "hybrid sigma-pressure":
        attrs |= {
            "standard_name": "atmosphere_hybrid_sigma_pressure_coordinate", "formula_terms": "ap: ap b: b ps: ps",
        }  # fmt: skip
        data["ap"] = ("lev", TOP_PRESSURE * (1.0 - SIGMA), {"units": "Pa"})
        data["b"] = ("lev", SIGMA, {"units": "1"})
    elif vertical == "sigma":
        attrs |= {"standard_name": "atmosphere_sigma_coordinate", "formula_terms": "sigma: lev ps: ps ptop: ptop"}
        lev = SIGMA
        data["ptop"] = ((), TOP_PRESSURE / 100.0, {"units": "hPa"})
    elif vertical == "hybrid height":
        attrs = {
            "standard_name": "atmosphere_hybrid_height_coordinate", "positive": "up", "units": "m",
            "formula_terms": "a: lev b: bz orog: orog",
        }  # fmt: skip
        lev = columns()["height"][:, 0]
        data["bz"] = ("lev", (columns()["height"][:, 1] - lev) / OROGRAPHY[1], {"units": "1"})
    data.coords["lev"] = ("lev", lev, attrs)


def _native(data, air, dims, _vertical):
    """Base state and perturbation, upward levels, per mass of dry air, geopotential between the levels."""
    full, between = ("bottom_top", *dims), ("bottom_top_stag", *dims)
    dry = 1.0 - air["humidity"]
    base_pressure = 1e5 * np.exp(-air["height"] / 8000.0)
    geopotential = GRAVITY * RADIUS * air["half_height"] / (RADIUS + air["half_height"])
    base_geopotential = np.round(geopotential * 0.99, -2)
    potential = air["temperature"] * (1e5 / air["pressure"]) ** KAPPA
    fields = {
        "P": (full, air["pressure"] - base_pressure, "perturbation pressure", "Pa"),
        "PB": (full, base_pressure, "BASE STATE PRESSURE", "Pa"),
        "T": (full, potential - 300.0, "perturbation potential temperature theta-t0", "K"),
        "PH": (between, geopotential - base_geopotential, "perturbation geopotential", "m2 s-2"),
        "PHB": (between, base_geopotential, "base-state geopotential", "m2 s-2"),
        "QVAPOR": (full, air["humidity"] / dry, "Water vapor mixing ratio", "kg kg-1"),
        "QCLOUD": (full, air["liquid"] / dry, "Cloud water mixing ratio", "kg kg-1"),
        "QICE": (full, air["ice"] / dry, "Ice mixing ratio", "kg kg-1"),
    }
    for name, (name_dims, values, description, units) in fields.items():
        stagger = "Z" if name_dims is between else ""
        attrs = {"description": description, "units": units, "stagger": stagger}
        data[name] = (name_dims, values[::-1].copy(), attrs)
    for name, description in (("ps", "SFC PRESSURE"), ("orog", "Terrain Height"), ("ts", "SURFACE SKIN TEMPERATURE")):
        data[name].attrs = {"description": description, "units": data[name].attrs["units"], "stagger": ""}


def native_history(times=2):
    """The native file with what stands beside it in a history file, over `Time`, positions of its own for winds."""
    data = model_file("native", "regular").drop_vars("time").rename(lat="south_north", lon="west_east")
    longitude, latitude = np.meshgrid(data["west_east"].values, data["south_north"].values)
    data = data.drop_vars(["south_north", "west_east"])
    data = data.rename(ps="PSFC", ts="TSK", orog="HGT", sea="LANDMASK")
    data["LANDMASK"].attrs = {"description": "LAND MASK (1 FOR LAND, 0 FOR WATER)", "units": "", "stagger": ""}
    level, ground = ("bottom_top", "south_north", "west_east"), ("south_north", "west_east")
    sizes = dict(data.sizes) | {"west_east_stag": 4, "soil_layers_stag": 4}
    beside = {
        "U": (("bottom_top", "south_north", "west_east_stag"), 10.0, "x-wind component", "m s-1"),
        "W": (("bottom_top_stag", *ground), 0.0, "z-wind component", "m s-1"),
        "T2": (ground, 290.0, "TEMP at 2 M", "K"),
        "TH2": (ground, 289.0, "POT TEMP at 2 M", "K"),
        "Q2": (ground, 0.008, "QV at 2 M", "kg kg-1"),
        "U10": (ground, 3.0, "U at 10 M", "m s-1"),
        "V10": (ground, 4.0, "V at 10 M", "m s-1"),
        "SST": (ground, 299.0, "SEA SURFACE TEMPERATURE", "K"),
        "TSLB": (("soil_layers_stag", *ground), 280.0, "SOIL TEMPERATURE", "K"),
        "MU": (ground, 1000.0, "perturbation dry air mass in column", "Pa"),
        "MUB": (ground, 9e4, "base state dry air mass in column", "Pa"),
        "P_HYD": (level, 5e4, "hydrostatic pressure", "Pa"),
        "CLDFRA": (level, 0.5, "CLOUD FRACTION", ""),
        "XLAND": (ground, 2.0, "LAND MASK (1 FOR LAND, 2 FOR WATER)", ""),
        "T00": ((), 290.0, "BASE STATE TEMPERATURE", "K"),
        "P_TOP": ((), 500.0, "PRESSURE TOP OF THE MODEL", "Pa"),
        "XLAT": (ground, latitude, "LATITUDE, SOUTH IS NEGATIVE", "degree_north"),
        "XLONG": (ground, longitude, "LONGITUDE, WEST IS NEGATIVE", "degree_east"),
        "XLAT_U": (("south_north", "west_east_stag"), 0.0, "LATITUDE, SOUTH IS NEGATIVE", "degree_north"),
        "XLONG_U": (("south_north", "west_east_stag"), 0.0, "LONGITUDE, WEST IS NEGATIVE", "degree_east"),
    }
    for name, (dims, value, description, units) in beside.items():
        values = np.broadcast_to(np.asarray(value, dtype="f8"), [sizes[d] for d in dims]).copy()
        data[name] = (dims, values, {"description": description, "units": units})
    series = xr.concat([data] * times, dim="Time")
    series["Times"] = ("Time", np.array([f"2020-07-15_{12 + k:02d}:00:00".encode() for k in range(times)]))
    return series
