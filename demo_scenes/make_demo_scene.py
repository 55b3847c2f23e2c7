"""Writes the invented weather of the demo: `python demo_scenes/make_demo_scene.py [FILE]`.

The same file comes out on every run. Everything is a function of position, so a coarser grid samples the
same weather.
"""

import sys
from pathlib import Path

import invented_air as air
import invented_ground
import numpy as np
import xarray as xr
from invented_clouds import all_clouds, inversion_pressure, stratocumulus_area
from texture import smooth_noise, step

import chansim  # noqa: F401  (before xarray can load ecCodes)
from chansim.constants import STANDARD_GRAVITY
from chansim.scene import humidity, hydrostatic

DEMO_FILE = Path(__file__).parents[1] / "chansim" / "data" / "demo_scene.nc"
VALID_TIME = np.datetime64("2026-01-21T00:00", "ns")
TITLE = "Invented case: a winter night over the Orlune Sea (no real weather, no real coast)"
LEVELS_HPA = (
    5, 7, 10, 15, 20, 30, 40, 50, 60, 70, 80, 90, 100, 110, 120, 130, 145, 160, 175, 190, 210, 230, 250, 275, 300,
    330, 360, 400, 440, 480, 520, 560, 600, 640, 680, 720, 760, 800, 830, 855, 880, 900, 915, 930, 945, 960, 980, 1000,
    1020, 1050,
)  # fmt: skip
_ALL_ICE, _ALL_LIQUID = 238.15, 273.15  # K, homogeneous freezing and melting
_KAPPA = 2.0 / 7.0


def make_scene(spacing=0.25):
    """The scene as a CF Dataset on a regular grid with `spacing` [degrees]."""
    latitude = np.arange(-5.0, 45.0 + 1e-6, spacing)
    longitude = np.arange(10.0, 70.0 + 1e-6, spacing)
    x, y = np.meshgrid(longitude, latitude)
    pressure = 100.0 * np.array(LEVELS_HPA, dtype=float)[:, None, None]
    ground = describe_ground(x, y, pressure)
    clouds = all_clouds(x, y, ground)
    clear_sky = clear_sky_share(clouds)
    fields, surface = columns(x, y, pressure, ground, clouds, clear_sky)
    return as_dataset(latitude, longitude, fields, surface)


def describe_ground(x, y, pressure):
    """Land, height, class, and surface pressure in hydrostatic balance with the free air."""
    ground = {
        "land": invented_ground.land_fraction(x, y),
        "orography": invented_ground.orography(x, y),
        "class": invented_ground.surface_class(x, y),
        "sea_surface_temperature": invented_ground.sea_surface_temperature(x, y),
    }
    temperature = air.free_temperature(x, y, pressure)
    sea_level = np.zeros_like(x)
    height = heights_on_all_levels(pressure, temperature, 0.0 * temperature, air.sea_level_pressure(x, y), sea_level)
    target = hydrostatic.geopotential_height(ground["orography"])
    ground["surface_pressure"] = hydrostatic.surface_pressure_from_heights(pressure, height, temperature, target)
    return ground


def heights_on_all_levels(pressure, temperature, specific_humidity, surface_pressure, ground_height):
    """Geopotential heights [m], carried on downward through levels below the ground."""
    height = hydrostatic.heights_from_surface(pressure, temperature, specific_humidity, surface_pressure, ground_height)
    virtual = humidity.virtual_temperature(temperature, specific_humidity)
    for k in range(1, len(height)):
        from_ground = ground_height - hydrostatic.layer_thickness(pressure[k], surface_pressure, virtual[k])
        height[k] = np.where(np.isnan(height[k]), from_ground, height[k])
    return height


def clear_sky_share(clouds):
    """Share of the sky [1] through which the ground cools at night."""
    clear = 1.0
    for cloud in clouds.values():
        clear = clear * (1.0 - cloud.fraction * (1.0 - np.exp(-cloud.path / 0.03)))
    return clear


def columns(x, y, pressure, ground, clouds, clear_sky):
    """Level fields {name: (level, y, x)} and surface fields {name: (y, x)} in SI units."""
    surface = surface_fields(x, y, ground, clear_sky)
    temperature = temperature_field(x, y, pressure, ground, surface, clouds)
    temperature = np.round(temperature * 32.0) / 32.0  # what the file keeps; all else is consistent with it
    condensate, fraction = condensate_fields(pressure, temperature, ground, clouds)
    specific_humidity = humidity_field(x, y, pressure, temperature, ground, fraction)
    specific_humidity = with_significant_bits(specific_humidity, 7, downward=True)
    surface["surface_pressure"] = np.round(ground["surface_pressure"])
    geopotential = heights_on_all_levels(
        pressure, temperature, specific_humidity, surface["surface_pressure"],
        hydrostatic.geopotential_height(surface["orography"]),
    )  # fmt: skip
    height = 4.0 * np.round(hydrostatic.geometric_height(geopotential) / 4.0)
    fields = {
        "temperature": temperature,
        "specific_humidity": specific_humidity,
        "height": height,
        "ozone": with_significant_bits(air.ozone(x, y, pressure), 6),
        "cloud_fraction": fraction,
        **{name: with_significant_bits(values, 5) for name, values in condensate.items()},
    }
    return fields, surface


def surface_fields(x, y, ground, clear_sky):
    """Temperatures of the ground and the air above it, and the other surface fields."""
    free = free_surface_temperature(x, y, ground)
    plateau = invented_ground.plateau(x, y)
    snow, arid = invented_ground.snow_cover(x, y), invented_ground.aridity(x, y)
    texture = 1.0 + 0.08 * smooth_noise(x, y, wavelength=2.5, seed=201)
    cooling = (4.5 + 3.0 * arid + 4.0 * snow + 21.0 * plateau) * texture * (0.12 + 0.88 * clear_sky)
    over_land = free - cooling
    below_air = (1.6 + 1.5 * arid + 1.8 * snow + 4.5 * plateau) * (0.15 + 0.85 * clear_sky)
    sea = ground["sea_surface_temperature"]
    air_sea = sea - 1.0 + 0.25 * np.clip(free - (sea - 1.0), -10.0, 3.0) * (free < sea)
    land = ground["land"]
    return {
        "air_temperature_2m": land * over_land + (1.0 - land) * air_sea,
        "skin_temperature": land * (over_land - below_air) + (1.0 - land) * sea,
        "wind_speed_10m": air.wind_speed(x, y) * (1.0 - 0.55 * land),
        "land_fraction": land,
        "orography": np.round(ground["orography"]),
        "surface_class": ground["class"],
    }


def free_surface_temperature(x, y, ground):
    """Temperature [K] of the free air at the pressure of the ground."""
    return air.free_temperature(x, y, ground["surface_pressure"])


def temperature_field(x, y, pressure, ground, surface, clouds):
    """Temperature [K]: the free air, mixed from below over warm ground, inversions over cold ground."""
    free = air.free_temperature(x, y, pressure)
    surface_pressure = ground["surface_pressure"]
    deck = stratocumulus_area(x, y, ground)
    sinking = np.exp(-(((pressure - 84000.0) / 11000.0) ** 2))
    free = free + 6.0 * np.clip(1.4 * deck, 0.0, 1.0) * sinking
    near_ground = surface["air_temperature_2m"]
    excess = np.minimum(near_ground - free_surface_temperature(x, y, ground), 0.0)
    depth = 2500.0 + 1500.0 * invented_ground.plateau(x, y)
    cooled = free + excess * np.exp(-np.clip(surface_pressure - pressure, 0.0, None) / depth)
    ratio = np.minimum(pressure / surface_pressure, 1.0)
    # dry adiabatic up to the cloud base, then about moist adiabatic; a trace more stable than either
    mixed = near_ground * np.where(ratio > 0.95, ratio**0.275, 0.95**0.275 * (ratio / 0.95) ** 0.19)
    temperature = np.where(pressure > 0.55 * surface_pressure, np.maximum(cooled, mixed), cooled)
    lid = step(pressure, inversion_pressure(x, y), 1400.0) * np.clip(2.0 * deck, 0.0, 1.0)
    temperature = temperature + lid * np.minimum(mixed - temperature, 0.0)
    dome = clouds["towers"].overshoot * np.exp(-(((pressure - 9200.0) / 1500.0) ** 2))
    return without_overturning(temperature - 6.0 * dome, pressure, surface_pressure)


def without_overturning(temperature, pressure, surface_pressure):
    """Raises temperatures until the potential temperature nowhere falls with height above the ground."""
    theta = temperature * (1e5 / pressure) ** _KAPPA
    above_ground = pressure <= surface_pressure
    floor = np.where(above_ground, theta, -np.inf)[::-1]
    settled = np.maximum.accumulate(floor, axis=0)[::-1]
    return np.where(above_ground, settled, theta) * (pressure / 1e5) ** _KAPPA


def liquid_share(temperature):
    """Share of liquid in cloud condensate [1]: none below 238.15 K, all above 273.15 K."""
    return np.clip((temperature - _ALL_ICE) / (_ALL_LIQUID - _ALL_ICE), 0.0, 1.0) ** 2


def cloud_saturation(temperature):
    """Vapour pressure in cloud [Pa]: over water and ice in the shares of the condensate."""
    share = liquid_share(temperature)
    over_ice = humidity.saturation_vapour_pressure_ice(np.minimum(temperature, 273.16))
    return share * humidity.saturation_vapour_pressure_water(temperature) + (1.0 - share) * over_ice


def condensate_fields(pressure, temperature, ground, clouds):
    """Grid-mean mixing ratios [kg/kg] and cloud fraction [1]."""
    mass = layer_mass(pressure, ground["surface_pressure"])
    total, rain, snow = np.zeros_like(temperature), np.zeros_like(temperature), np.zeros_like(temperature)
    clear = np.ones_like(temperature)
    for cloud in clouds.values():
        cover = np.where(cloud.fraction > 0.02, cloud.fraction, 0.0)
        shape = vertical_shape(pressure, cloud, ground["surface_pressure"])
        total += cover * spread(cloud.path, shape, mass)
        clear *= 1.0 - cover * np.minimum(4.0 * shape, 1.0)
        fall = step(pressure, cloud.top + 0.15 * (cloud.base - cloud.top), 3000.0)
        fall = fall * (1.0 - step(pressure, cloud.base + 8000.0, 6000.0))  # it evaporates below a high base
        precipitation = spread(cover * cloud.precipitation, fall, mass)
        melted = step(temperature, 273.5, 1.5)
        rain += melted * precipitation
        snow += (1.0 - melted) * precipitation
    share = liquid_share(temperature)
    fraction = np.where(total > 1e-8, np.round(64.0 * (1.0 - clear)) / 64.0, 0.0)
    total = np.where(fraction > 0.0, total, 0.0)
    fields = {"cloud_liquid": share * total, "cloud_ice": (1.0 - share) * total, "rain": rain, "snow": snow}
    return {name: np.where(values > 1e-8, values, 0.0) for name, values in fields.items()}, fraction


def layer_mass(pressure, surface_pressure):
    """Mass [kg m-2] of the air each level stands for; 0 below ground."""
    middle = np.sqrt(pressure[1:] * pressure[:-1])
    edges = np.concatenate([pressure[:1] ** 2 / middle[:1], middle, pressure[-1:] ** 2 / middle[-1:]])
    edges = np.minimum(edges, surface_pressure)
    return np.where(pressure <= surface_pressure, np.diff(edges, axis=0) / STANDARD_GRAVITY, 0.0)


def vertical_shape(pressure, cloud, surface_pressure):
    """Profile of a cloud between top and base, at most 1."""
    depth = np.clip((pressure - cloud.top) / (cloud.base - cloud.top), 0.0, 1.0)
    peak = cloud.upper / (cloud.upper + cloud.lower)
    shape = (depth / peak) ** cloud.upper * ((1.0 - depth) / (1.0 - peak)) ** cloud.lower
    return np.where(pressure <= surface_pressure, shape, 0.0)


def spread(path, shape, mass):
    """Mixing ratio [kg/kg] of a water path over a profile."""
    whole = np.sum(shape * mass, axis=0)
    return np.where(whole > 0.0, path * shape / np.maximum(whole, 1e-6), 0.0)


def humidity_field(x, y, pressure, temperature, ground, fraction):
    """Specific humidity [kg/kg]: saturated in cloud, below saturation outside it."""
    relative = air.relative_humidity(x, y, pressure, ground["surface_pressure"])
    over_water = humidity.saturation_vapour_pressure_water(temperature)
    over_ice = humidity.saturation_vapour_pressure_ice(np.minimum(temperature, 273.16))
    limit = 0.97 * np.where(temperature < 273.16, over_ice, over_water)
    clear = humidity.specific_humidity_from_vapour_pressure(np.minimum(relative * over_water, limit), pressure)
    clear = air.dried_above_tropopause(clear, pressure, air.tropopause_pressure(air.air_mass(x, y, 3e4)))
    clear = np.minimum(clear, humidity.specific_humidity_from_vapour_pressure(limit, pressure))
    # crystals leave a little supersaturation over ice
    excess = 1.0 + 0.06 * step(-temperature, -232.0, 12.0)
    in_cloud = humidity.specific_humidity_from_vapour_pressure(excess * cloud_saturation(temperature), pressure)
    return clear + fraction * np.maximum(in_cloud - clear, 0.0)


def with_significant_bits(values, bits, downward=False):
    """float32 values with only the leading `bits` of the mantissa set, so that they compress well."""
    values = np.asarray(values, dtype=np.float32)
    drop = 23 - bits
    raw = values.view(np.uint32)
    half = np.uint32(0 if downward else 1 << (drop - 1))
    return ((raw + half) & np.uint32(0xFFFFFFFF << drop & 0xFFFFFFFF)).view(np.float32)


# name in the file: CF standard name, units, words
_LEVEL_ATTRIBUTES = {
    "temperature": ("air_temperature", "K", "temperature"),
    "specific_humidity": ("specific_humidity", "kg kg-1", "specific humidity"),
    "height": ("height_above_mean_sea_level", "m", "geometric height of the pressure level"),
    "ozone": ("mole_fraction_of_ozone_in_air", "1", "ozone"),
    "cloud_fraction": ("cloud_area_fraction_in_atmosphere_layer", "1", "cloud fraction"),
    "cloud_liquid": ("mass_fraction_of_cloud_liquid_water_in_air", "kg kg-1", "cloud liquid water, grid mean"),
    "cloud_ice": ("mass_fraction_of_cloud_ice_in_air", "kg kg-1", "cloud ice, grid mean"),
    "rain": ("mass_fraction_of_rain_in_air", "kg kg-1", "rain, grid mean"),
    "snow": ("mass_fraction_of_snow_in_air", "kg kg-1", "snow, grid mean"),
}
_SURFACE_ATTRIBUTES = {
    "surface_pressure": ("surface_air_pressure", "Pa", "surface pressure"),
    "skin_temperature": ("surface_temperature", "K", "temperature of the surface itself"),
    "air_temperature_2m": ("air_temperature", "K", "2 metre temperature"),
    "wind_speed_10m": ("wind_speed", "m s-1", "10 metre wind speed"),
    "land_fraction": ("land_area_fraction", "1", "share of land"),
    "orography": ("surface_altitude", "m", "height of the ground"),
}
_SURFACE_STEPS = {"skin_temperature": 64, "air_temperature_2m": 64, "wind_speed_10m": 16, "land_fraction": 128}


def as_dataset(latitude, longitude, fields, surface):
    """The CF Dataset."""
    scene = xr.Dataset(coords=_coordinates(latitude, longitude))
    for name, (standard_name, units, words) in _LEVEL_ATTRIBUTES.items():
        attrs = {"standard_name": standard_name, "units": units, "long_name": words}
        scene[name] = (("pressure", "latitude", "longitude"), fields[name].astype(np.float32), attrs)
    for name, (standard_name, units, words) in _SURFACE_ATTRIBUTES.items():
        attrs = {"standard_name": standard_name, "units": units, "long_name": words}
        steps = _SURFACE_STEPS.get(name, 1)
        values = np.round(surface[name] * steps) / steps
        scene[name] = (("latitude", "longitude"), values.astype(np.float32), attrs)
    scene["surface_class"] = (("latitude", "longitude"), surface["surface_class"], {
        "long_name": "what covers the ground", "units": "1", "flag_values": np.arange(5, dtype=np.int8),
        "flag_meanings": "sea land desert snow ice",
    })  # fmt: skip
    scene.attrs = {
        "Conventions": "CF-1.11",
        "title": TITLE,
        "model": "invented weather",
        "source": "analytic structures and deterministic noise, demo_scenes/make_demo_scene.py",
        "comment": "Values are rounded so that the file is small; humidity and heights fit the rounded temperature.",
        "coastline": "own",
    }
    return scene


def _coordinates(latitude, longitude):
    return {
        "pressure": ("pressure", np.array(LEVELS_HPA, dtype=np.float32),
                     {"standard_name": "air_pressure", "units": "hPa", "positive": "down", "axis": "Z"}),
        "latitude": ("latitude", latitude.astype(np.float32),
                     {"standard_name": "latitude", "units": "degrees_north", "axis": "Y"}),
        "longitude": ("longitude", longitude.astype(np.float32),
                      {"standard_name": "longitude", "units": "degrees_east", "axis": "X"}),
        "time": ((), VALID_TIME, {"standard_name": "time", "long_name": "valid time"}),
    }  # fmt: skip


def write(scene, path):
    """Writes the Dataset as compressed netCDF; returns the path."""
    encoding = {name: {"zlib": True, "complevel": 9, "shuffle": True, "_FillValue": None} for name in scene.data_vars}
    encoding |= {name: {"_FillValue": None} for name in ("pressure", "latitude", "longitude")}
    encoding["time"] = {"units": "hours since 2026-01-21 00:00:00", "dtype": "int32"}
    scene.to_netcdf(path, encoding=encoding)
    return Path(path)


if __name__ == "__main__":
    written = write(make_scene(), sys.argv[1] if len(sys.argv) > 1 else DEMO_FILE)
    print(f"{written}: {written.stat().st_size / 1e6:.2f} MB")
