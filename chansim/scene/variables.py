"""The canonical variable table: the single source of names, units and ranges.

A canonical scene is an `xarray.Dataset` whose variables carry these names, in
these units. `level` runs from the top of the atmosphere to the surface. The
horizontal dimensions keep their names from the source.
"""

from dataclasses import dataclass


@dataclass(frozen=True)
class Variable:
    """One canonical variable.

    name : canonical name in the Dataset
    standard_name : CF standard name
    units : canonical units (udunits form)
    kind : "level" (full levels), "half_level", "surface" or "coordinate"
    valid_min, valid_max : physically possible range in canonical units
    required : True when a scene cannot be made without it
    default : what is used when it is absent, in words ("" = simply absent)
    """

    name: str
    standard_name: str
    units: str
    kind: str
    valid_min: float
    valid_max: float
    required: bool = False
    default: str = ""


_TABLE = (
    Variable("pressure", "air_pressure", "Pa", "level", 0.1, 1.2e5, True),
    Variable("temperature", "air_temperature", "K", "level", 120.0, 350.0, True),
    Variable("specific_humidity", "specific_humidity", "kg kg-1", "level", 0.0, 0.06, True),
    Variable(
        "height",
        "height_above_mean_sea_level",
        "m",
        "level",
        -1000.0,
        120e3,
        False,
        "hydrostatic integration from the surface",
    ),
    Variable(
        "ozone_mole_fraction",
        "mole_fraction_of_ozone_in_air",
        "1",
        "level",
        0.0,
        3e-5,
        False,
        "reference atmosphere by latitude and season",
    ),
    Variable(
        "carbon_dioxide_mole_fraction",
        "mole_fraction_of_carbon_dioxide_in_air",
        "1",
        "level",
        0.0,
        0.01,
        False,
        "420 ppm, well mixed",
    ),
    Variable(
        "nitrous_oxide_mole_fraction",
        "mole_fraction_of_nitrous_oxide_in_air",
        "1",
        "level",
        0.0,
        1e-5,
        False,
        "337 ppb, reference shape",
    ),
    Variable(
        "methane_mole_fraction",
        "mole_fraction_of_methane_in_air",
        "1",
        "level",
        0.0,
        1e-4,
        False,
        "1.92 ppm, reference shape",
    ),
    Variable(
        "carbon_monoxide_mole_fraction",
        "mole_fraction_of_carbon_monoxide_in_air",
        "1",
        "level",
        0.0,
        1e-4,
        False,
        "reference atmosphere",
    ),
    Variable(
        "cloud_fraction",
        "cloud_area_fraction_in_atmosphere_layer",
        "1",
        "level",
        0.0,
        1.0,
        False,
        "1 where there is condensate",
    ),
    Variable(
        "cloud_liquid", "mass_fraction_of_cloud_liquid_water_in_air", "kg kg-1", "level", 0.0, 0.02, False, "none"
    ),
    Variable("cloud_ice", "mass_fraction_of_cloud_ice_in_air", "kg kg-1", "level", 0.0, 0.02, False, "none"),
    Variable("rain", "mass_fraction_of_rain_in_air", "kg kg-1", "level", 0.0, 0.05, False, "none"),
    Variable("snow", "mass_fraction_of_snow_in_air", "kg kg-1", "level", 0.0, 0.05, False, "none"),
    Variable("graupel", "mass_fraction_of_graupel_in_air", "kg kg-1", "level", 0.0, 0.05, False, "none"),
    Variable(
        "effective_radius_liquid",
        "effective_radius_of_cloud_liquid_water_particles",
        "m",
        "level",
        0.0,
        1e-3,
        False,
        "parametrised",
    ),
    Variable(
        "effective_radius_ice",
        "effective_radius_of_cloud_ice_particles",
        "m",
        "level",
        0.0,
        5e-3,
        False,
        "parametrised",
    ),
    Variable(
        "number_liquid",
        "number_concentration_of_cloud_liquid_water_particles_in_air_per_mass",
        "kg-1",
        "level",
        0.0,
        1e11,
        False,
        "",
    ),
    Variable(
        "number_ice", "number_concentration_of_ice_crystals_in_air_per_mass", "kg-1", "level", 0.0, 1e9, False, ""
    ),
    Variable("half_pressure", "air_pressure", "Pa", "half_level", 0.0, 1.2e5, False, "midway between levels"),
    Variable(
        "surface_pressure", "surface_air_pressure", "Pa", "surface", 3e4, 1.15e5, False, "pressure of the lowest level"
    ),
    Variable(
        "skin_temperature",
        "surface_temperature",
        "K",
        "surface",
        170.0,
        360.0,
        False,
        "2 m temperature, else the lowest level's temperature",
    ),
    Variable("air_temperature_2m", "air_temperature", "K", "surface", 170.0, 340.0, False, ""),
    Variable("specific_humidity_2m", "specific_humidity", "kg kg-1", "surface", 0.0, 0.06, False, ""),
    Variable(
        "orography", "surface_altitude", "m", "surface", -500.0, 9000.0, False, "hydrostatic from the surface pressure"
    ),
    Variable("land_fraction", "land_area_fraction", "1", "surface", 0.0, 1.0, False, "from the built-in coastline"),
    Variable("surface_class", "", "1", "surface", 0, 4, False, "sea or land by land_fraction"),
    Variable("wind_speed_10m", "wind_speed", "m s-1", "surface", 0.0, 120.0, False, "7 m s-1"),
    Variable("latitude", "latitude", "degrees_north", "coordinate", -90.0, 90.0, True),
    Variable("longitude", "longitude", "degrees_east", "coordinate", -180.0, 360.0, True),
    Variable("time", "time", "", "coordinate", 0.0, 0.0, False, ""),
)

VARIABLES = {v.name: v for v in _TABLE}

# flag values of `surface_class`
SURFACE_CLASSES = {"sea": 0, "land": 1, "desert": 2, "snow": 3, "ice": 4}
