"""Small made-up model files for the tests of chansim.scene."""

import numpy as np
import xarray as xr

PRESSURE = np.array([1000.0, 925.0, 850.0, 700.0, 500.0, 300.0, 200.0, 100.0, 50.0])  # hPa, upward
LATITUDE = np.array([50.0, 40.0, 30.0])
LONGITUDE = np.array([-20.0, -10.0, 0.0, 10.0])
TIME = np.datetime64("2020-07-15T12:00", "ns")


def standard_temperature(pressure_hpa):
    """Roughly a mid-latitude column, K."""
    return np.maximum(288.0 * (pressure_hpa / 1013.25) ** 0.19, 216.0)


def pressure_level_file():
    """Temperature and humidity on pressure levels, surface pressure, as CF asks; a fresh Dataset."""
    shape = (len(PRESSURE), len(LATITUDE), len(LONGITUDE))
    temperature = np.broadcast_to(standard_temperature(PRESSURE)[:, None, None], shape).astype("f4")
    humidity = np.broadcast_to((0.01 * (PRESSURE / 1000.0) ** 4)[:, None, None], shape).astype("f4")
    dims = ("plev", "lat", "lon")
    return xr.Dataset(
        {
            "T": (dims, temperature.copy(), {"standard_name": "air_temperature", "units": "K"}),
            "Q": (dims, humidity.copy(), {"standard_name": "specific_humidity", "units": "kg kg-1"}),
            "PS": (
                ("lat", "lon"),
                np.full(shape[1:], 101000.0, "f4"),
                {"standard_name": "surface_air_pressure", "units": "Pa"},
            ),
        },
        coords={
            "plev": ("plev", PRESSURE, {"units": "hPa", "standard_name": "air_pressure", "axis": "Z"}),
            "lat": ("lat", LATITUDE, {"units": "degrees_north", "standard_name": "latitude"}),
            "lon": ("lon", LONGITUDE, {"units": "degrees_east", "standard_name": "longitude"}),
            "time": ((), TIME, {"standard_name": "time"}),
        },
    )


def write_grib(path, messages):
    """Writes GRIB 2 on a regular 10 degree grid (2 x 3 points) with ecCodes.

    messages : list of (keys, value or array of 6 values)
    """
    import eccodes

    grid = {
        "Ni": 3, "Nj": 2, "latitudeOfFirstGridPointInDegrees": 50.0, "longitudeOfFirstGridPointInDegrees": 0.0,
        "latitudeOfLastGridPointInDegrees": 40.0, "longitudeOfLastGridPointInDegrees": 20.0,
        "iDirectionIncrementInDegrees": 10.0, "jDirectionIncrementInDegrees": 10.0,
    }  # fmt: skip
    with open(path, "wb") as file:
        for keys, value in messages:
            handle = eccodes.codes_grib_new_from_samples("regular_ll_pl_grib2")
            defaults = {"dataDate": 20200715, "dataTime": 1200, **grid}
            for key, setting in {**defaults, **keys}.items():
                eccodes.codes_set(handle, key, setting)
            values = np.broadcast_to(np.asarray(value, dtype=float), 6).copy()
            eccodes.codes_set(handle, "bitsPerValue", 24)
            eccodes.codes_set_values(handle, values)
            eccodes.codes_write(handle, file)
            eccodes.codes_release(handle)


def isobaric_messages(short_name, profile, **keys):
    """Messages of one parameter on pressure levels: {pressure in hPa: value}."""
    messages = []
    for pressure_hpa, value in profile.items():
        whole = pressure_hpa >= 1
        level = {"typeOfLevel": "isobaricInhPa" if whole else "isobaricInPa"}
        level["level"] = int(pressure_hpa) if whole else int(round(pressure_hpa * 100))
        messages.append(({"shortName": short_name, **level, **keys}, value))
    return messages


def basic_grib_messages():
    """Temperature and relative humidity on four levels, surface pressure."""
    temperature = {1000: 288.0, 700: 273.0, 300: 230.0, 100: 205.0}
    return [
        *isobaric_messages("t", temperature),
        *isobaric_messages("r", {1000: 80.0, 700: 50.0, 300: 30.0, 100: 10.0}),
        ({"shortName": "sp", "typeOfLevel": "surface"}, 101000.0),
    ]


def write_any_grib(path, sample, messages, grid=None):
    """Writes GRIB messages from a sample of ecCodes, on its own grid unless `grid` (keys) gives another.

    messages : list of (keys, value or array); the key `pv` holds vertical coefficients or None
    """
    import eccodes

    with open(path, "wb") as file:
        for keys, value in messages:
            handle = eccodes.codes_grib_new_from_samples(sample)
            settings = {"dataDate": 20200715, "dataTime": 1200, **(grid or {}), **keys}
            coefficients = settings.pop("pv", None)
            for key, setting in settings.items():
                (eccodes.codes_set_array if np.ndim(setting) else eccodes.codes_set)(handle, key, setting)
            if coefficients is not None:
                eccodes.codes_set(handle, "PVPresent", 1)
                eccodes.codes_set_array(handle, "pv", np.asarray(coefficients, dtype=float))
            count = eccodes.codes_get(handle, "numberOfDataPoints")
            eccodes.codes_set(handle, "bitsPerValue", 24)
            eccodes.codes_set_values(handle, np.broadcast_to(np.asarray(value, dtype=float), count).copy())
            eccodes.codes_write(handle, file)
            eccodes.codes_release(handle)
