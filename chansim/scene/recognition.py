"""Which field of a model file is which quantity.

Fields are known by what they say about themselves: CF standard name, GRIB parameter, then a short name of
the GRIB parameter tables, then a plain long name; always with the kind of level and with units that fit.
The file's name plays no part. A mapping given by the user goes before all of that.
"""

import functools
import re
from collections.abc import Callable
from dataclasses import dataclass, field

from chansim.errors import SceneError
from chansim.scene.units import is_convertible
from chansim.scene.variables import VARIABLES

# long names of fields that are only a part of what they name
PART_OF_A_SUM = re.compile(r"\bperturbation\b|\bbase[\s-]?state\b|\breference state\b|\bpert\.?(?=\s)|\bdeviation\b")
MAPPING_HINT = 'mapping={{"{quantity}": "{name}"}}'


@dataclass
class Field:
    """One field of a model file at one time, with what it says about itself.

    name : unique in the file; `t@isobaric` in GRIB, the variable's name elsewhere
    open : function that gives the DataArray with the coordinates of the source
    place : "levels", "surface", "2m", "10m", "single" (one level, unsaid which) or another kind of level
    level_dim : dimension of the levels, "" when place is not "levels"
    evidence : standard_name, short_name, param_id, long_name, units as far as given; "is_part" when it is only a part
        of a sum that the user asks for
    parts : fields that it is the sum of, () when it is not
    """

    name: str
    open: Callable
    place: str
    level_dim: str = ""
    evidence: dict = field(default_factory=dict)
    parts: tuple = ()

    @functools.cached_property
    def data(self):
        """DataArray with the coordinates of the source; opened when first asked for."""
        return self.open()

    @property
    def units(self):
        """Units attribute, None when the file gives none."""
        return self.evidence.get("units")

    def __str__(self):
        label = self.evidence.get("standard_name") or self.evidence.get("long_name") or "no standard name"
        return f"{self.name} ({label}; {self.place}; units {self.units or 'not given'})"


@dataclass(frozen=True)
class Quantity:
    """Something a file may hold, canonical or one step away from canonical (relative humidity, say).

    name : canonical name, or a name of its own when it has to be turned into one
    place : "levels", "surface", "2m" or "10m"
    units : units it is wanted in
    standard_names, short_names, param_ids, long_names : how it is recognised
    serves : the canonical variable it leads to
    """

    name: str
    place: str
    units: str
    standard_names: tuple = ()
    short_names: tuple = ()
    param_ids: tuple = ()
    long_names: tuple = ()
    serves: str = ""


# GRIB short names and parameter numbers: the ecCodes parameter tables.
_LEVELS = (
    Quantity("temperature", "levels", "K", ("air_temperature",), ("t", "ta", "temp", "tdry"), (130,),
             ("temperature", "air temperature", "dry bulb temperature")),
    Quantity("potential_temperature", "levels", "K", ("air_potential_temperature",), ("pt", "theta"), (3,),
             ("potential temperature",), "temperature"),
    Quantity("pressure", "levels", "Pa", ("air_pressure",), ("pres", "p"), (54,), ("pressure", "air pressure")),
    Quantity("specific_humidity", "levels", "kg kg-1", ("specific_humidity",), ("q", "hus"), (133,),
             ("specific humidity",)),
    Quantity("relative_humidity", "levels", "1", ("relative_humidity",), ("r", "rh", "hur"), (157,),
             ("relative humidity",), "specific_humidity"),
    Quantity("dew_point", "levels", "K", ("dew_point_temperature",), ("dpt", "dp", "td"), (3017,),
             ("dew point temperature", "dewpoint temperature", "dew point"), "specific_humidity"),
    Quantity("humidity_mixing_ratio", "levels", "kg kg-1", ("humidity_mixing_ratio",), ("mixr",), (),
             ("water vapor mixing ratio", "water vapour mixing ratio", "humidity mixing ratio"),
             "specific_humidity"),
    Quantity("half_pressure", "levels", "Pa", (), (), (), ("air pressure at half levels", "half level pressure")),
    Quantity("exner_function", "levels", "1", ("dimensionless_exner_function",), ("exner",), (), ("exner function",),
             "pressure"),
    Quantity("air_density", "levels", "kg m-3", ("air_density",), ("den", "rho", "rho_d"), (3089,),
             ("air density", "dry air density"),
             "pressure"),
    Quantity("height", "levels", "m", ("height_above_mean_sea_level", "altitude"), ("alt", "hhl"), (),
             ("height above mean sea level", "altitude above mean sea level")),
    Quantity("height_above_ground", "levels", "m", ("height",), ("h",), (3008,), ("height above ground",), "height"),
    Quantity("geopotential_height", "levels", "m", ("geopotential_height",), ("gh", "zg"), (156,),
             ("geopotential height",), "height"),
    Quantity("geopotential", "levels", "m2 s-2", ("geopotential",), ("z",), (129,), ("geopotential",), "height"),
    Quantity("cloud_fraction", "levels", "1", ("cloud_area_fraction_in_atmosphere_layer", "cloud_area_fraction"),
             ("cc", "cl", "tcc", "cldfra"), (248, 228164), ("fraction of cloud cover", "cloud fraction")),
    Quantity("effective_radius_liquid", "levels", "m",
             ("effective_radius_of_cloud_liquid_water_particles", "effective_radius_of_cloud_liquid_water_particle"),
             (), (), ("effective radius cloud water", "effective radius of cloud water")),
    Quantity("effective_radius_ice", "levels", "m",
             ("effective_radius_of_cloud_ice_particles", "effective_radius_of_cloud_ice_particle"),
             (), (), ("effective radius cloud ice", "effective radius of cloud ice")),
    Quantity("number_liquid", "levels", "kg-1",
             ("number_concentration_of_cloud_liquid_water_particles_in_air_per_mass",), (), (),
             ("cloud water number concentration", "cloud droplet number concentration")),
    Quantity("number_ice", "levels", "kg-1", ("number_concentration_of_ice_crystals_in_air_per_mass",),
             (), (), ("ice number concentration", "cloud ice number concentration")),
)  # fmt: skip


def _gas(name, cf_name, short_names, param_ids):
    """A gas as mole fraction, and as mass fraction under `<name>_by_mass`."""
    canonical = f"{name}_mole_fraction"
    return (
        Quantity(canonical, "levels", "1", (f"mole_fraction_of_{cf_name}_in_air",)),
        Quantity(f"{name}_mass_fraction", "levels", "kg kg-1", (f"mass_fraction_of_{cf_name}_in_air",),
                 short_names, param_ids, (f"{cf_name.replace('_', ' ')} mixing ratio",), canonical),
    )  # fmt: skip


def _condensate(name, cf_names, specific, ratio, ratio_long=()):
    """Condensate per mass of moist air, and per mass of dry air under `<name>_mixing_ratio`."""
    specific_short, specific_ids = specific
    ratio_short, ratio_ids = ratio
    standard = tuple(f"mass_fraction_of_{cf}_in_air" for cf in cf_names)
    return (
        Quantity(name, "levels", "kg kg-1", standard, specific_short, specific_ids),
        Quantity(f"{name}_mixing_ratio", "levels", "kg kg-1", tuple(f"{cf}_mixing_ratio" for cf in cf_names),
                 ratio_short, ratio_ids, ratio_long, name),
    )  # fmt: skip


_GASES = (
    *_gas("ozone", "ozone", ("o3", "o3mr", "go3"), (203, 210203, 260131)),
    *_gas("carbon_dioxide", "carbon_dioxide", ("co2",), (210061,)),
    *_gas("nitrous_oxide", "nitrous_oxide", ("n2o",), (210063,)),
    *_gas("methane", "methane", ("ch4",), (210062,)),
    *_gas("carbon_monoxide", "carbon_monoxide", ("co",), (210123,)),
)
_CONDENSATES = (
    *_condensate("cloud_liquid", ("cloud_liquid_water",), (("clwc", "clw"), (246,)), (("clwmr", "qc"), (260018,)),
                 ("cloud water mixing ratio", "cloud liquid water mixing ratio")),
    *_condensate("cloud_ice", ("cloud_ice",), (("ciwc", "cli"), (247,)),
                 (("icmr", "ciwmr", "qi"), (260019,)), ("ice mixing ratio", "cloud ice mixing ratio")),
    *_condensate("rain", ("rain", "rain_water"), (("crwc",), (75,)), (("rwmr", "qr"), (260020,)),
                 ("rain water mixing ratio", "rain mixing ratio")),
    *_condensate("snow", ("snow", "snow_water"), (("cswc",), (76,)), (("snmr", "qs"), (260021,)),
                 ("snow mixing ratio", "snow water mixing ratio")),
    *_condensate("graupel", ("graupel", "graupel_and_hail"), ((), ()), (("grle", "grmr", "qg"), (260028,)),
                 ("graupel mixing ratio",)),
)  # fmt: skip
_SURFACE = (
    Quantity("surface_pressure", "surface", "Pa", ("surface_air_pressure",), ("sp", "ps", "psfc"), (134,),
             ("surface pressure", "sfc pressure")),
    Quantity("log_surface_pressure", "surface", "1", (), ("lnsp",), (152,),
             ("logarithm of surface pressure",), "surface_pressure"),
    Quantity("skin_temperature", "surface", "K", ("surface_temperature",), ("skt", "ts"), (235, 130),
             ("skin temperature", "surface skin temperature")),
    Quantity("sea_surface_temperature", "surface", "K", ("sea_surface_temperature", "sea_surface_skin_temperature"),
             ("sst", "tos"), (34, 151159), ("sea surface temperature",), "skin_temperature"),
    Quantity("orography", "surface", "m", ("surface_altitude",), ("orog", "hsurf"), (228002,),
             ("orography", "terrain height")),
    Quantity("surface_geopotential", "surface", "m2 s-2", ("geopotential", "surface_geopotential"), ("z",), (129,),
             ("surface geopotential",), "orography"),
    Quantity("land_fraction", "surface", "1", ("land_area_fraction", "land_binary_mask"), ("lsm", "sftlf", "land"),
             (172,), ("land-sea mask", "land fraction", "land mask", "land mask (1 for land, 0 for water)")),
    Quantity("surface_class", "surface", "1"),
    Quantity("air_temperature_2m", "2m", "K", ("air_temperature",), ("2t", "t2m", "tas", "t2"), (167,),
             ("2 metre temperature", "temp at 2 m")),
    Quantity("specific_humidity_2m", "2m", "kg kg-1", ("specific_humidity",), ("2sh", "sh2", "huss"), (174096,)),
    Quantity("humidity_mixing_ratio_2m", "2m", "kg kg-1", ("humidity_mixing_ratio",), ("q2",), (), ("qv at 2 m",),
             "specific_humidity_2m"),
    Quantity("relative_humidity_2m", "2m", "1", ("relative_humidity",), ("2r", "r2", "hurs"), (260242,), (),
             "specific_humidity_2m"),
    Quantity("dew_point_2m", "2m", "K", ("dew_point_temperature",), ("2d", "d2m"), (168,), (),
             "specific_humidity_2m"),
    Quantity("wind_speed_10m", "10m", "m s-1", ("wind_speed",), ("10si", "si10", "sfcwind"), (207,)),
    Quantity("eastward_wind_10m", "10m", "m s-1", ("eastward_wind", "x_wind"), ("10u", "u10", "uas"), (165,), (),
             "wind_speed_10m"),
    Quantity("northward_wind_10m", "10m", "m s-1", ("northward_wind", "y_wind"), ("10v", "v10", "vas"), (166,), (),
             "wind_speed_10m"),
)  # fmt: skip
QUANTITIES = {q.name: q for q in (*_LEVELS, *_GASES, *_CONDENSATES, *_SURFACE)}

_NEAR_SURFACE = ("2m", "10m")


@dataclass
class Recognised:
    """What was found.

    fields : {quantity name: Field}
    units : {quantity name: units of the source}
    log : one readable line for each field recognised or turned down
    unused : fields that served no quantity
    mapped : quantities the user named
    refused : quantities the user does not want from this source
    """

    fields: dict
    units: dict
    log: list
    unused: list
    mapped: set = field(default_factory=set)
    refused: set = field(default_factory=set)


def recognise(fields, mapping=None):
    """Which of the fields is which quantity.

    Parameters
    ----------
    fields : list of Field
    mapping : {quantity: name of the field, or {"name": ..., "units": ...}, or "" to leave it out};
        quantities are the canonical names and those of `QUANTITIES`

    Returns
    -------
    Recognised

    Raises
    ------
    SceneError : two fields fit one quantity equally well; the mapping names what does not exist
    """
    result = Recognised({}, {}, [], [])
    chosen = _apply_mapping(fields, mapping or {}, result)
    for quantity in QUANTITIES.values():
        if quantity.name in result.fields or quantity.name in result.refused:
            continue
        candidates = _candidates(quantity, [f for f in fields if f.name not in chosen])
        if not candidates:
            continue
        tier = min(candidates)
        best = _prefer_instantaneous(_with_fitting_units(quantity, tier, candidates[tier], result.log))
        best = _prefer_levels_of_temperature(quantity, best, result)
        if len(best) > 1:
            raise SceneError(_ambiguous(quantity, best))
        if best:
            _record(result, quantity, best[0], best[0].units, _TIERS[tier])
    used = {f.name for f in result.fields.values()}
    result.unused = [f for f in fields if f.name not in used]
    return result


_TIERS = ("canonical name", "standard name", "GRIB parameter", "short name", "long name")
_STRONG = 2  # up to here a field means what it says


def _candidates(quantity, fields):
    """Fields that may be the quantity, by strength of the evidence: {tier: [Field]}."""
    found = {}
    for f in fields:
        tier = _evidence_tier(quantity, f)
        if tier is not None:
            found.setdefault(tier, []).append(f)
    return found


def _with_fitting_units(quantity, tier, fields, log):
    """Fields whose units can become those of the quantity.

    When none can and the evidence is strong, the fields stay: reading them then says what is wrong.
    """
    fitting = [f for f in fields if f.units is None or is_convertible(f.units, quantity.units)]
    if not fitting and tier <= _STRONG:
        return fields[:1]
    for f in fields:
        if f not in fitting:
            log.append(
                f"{f.name}: would be {quantity.name} by its {_TIERS[tier]}, but its units '{f.units}' "
                f"cannot become {quantity.units}; not used"
            )
    return fitting


def _evidence_tier(quantity, f):
    """Index into `_TIERS` of the strongest evidence that `f` is `quantity`; None when there is none."""
    evidence = f.evidence
    short = str(evidence.get("short_name", "")).lower()
    if not _place_fits(quantity, f, short):
        return None
    if f.name == quantity.name:
        return 0
    if evidence.get("is_part") or PART_OF_A_SUM.search(str(evidence.get("long_name", "")).lower()):
        return None
    standard_name = evidence.get("standard_name")
    if standard_name and standard_name in (*quantity.standard_names, _canonical_standard_name(quantity)):
        return 1
    if "param_id" in evidence:
        if evidence["param_id"] in quantity.param_ids or short in quantity.short_names:
            return 2
        return None
    if standard_name and standard_name not in ("unknown", "undef"):
        return None  # it says clearly that it is something else
    if short in quantity.short_names:
        return 3
    if str(evidence.get("long_name", "")).strip().lower() in quantity.long_names:
        return 4
    return None


def _canonical_standard_name(quantity):
    variable = VARIABLES.get(quantity.name)
    if variable is None or variable.kind == "half_level":  # shares the standard name of the full levels
        return None
    return variable.standard_name or None


def _place_fits(quantity, f, short):
    if quantity.place == f.place:
        return True
    if f.place != "single":
        return False
    if quantity.place == "surface":
        return True
    # one unnamed level: near the surface only when its name says so
    long_name = str(f.evidence.get("long_name", "")).strip().lower()
    named = short in quantity.short_names or f.name == quantity.name or long_name in quantity.long_names
    return quantity.place in _NEAR_SURFACE and named


def _prefer_instantaneous(fields):
    """Drops means, sums and extremes over time when an instantaneous field is there too."""
    instantaneous = [f for f in fields if f.evidence.get("over_time", "instant") == "instant"]
    return instantaneous or fields


def _prefer_levels_of_temperature(quantity, fields, result):
    """Of fields on several kinds of levels, those on the levels of the temperature when there are any."""
    temperature = result.fields.get("temperature") or result.fields.get("potential_temperature")
    if temperature is None or quantity.place != "levels" or quantity.serves == "temperature":
        return fields
    same = [f for f in fields if f.level_dim == temperature.level_dim]
    return same or fields


def _ambiguous(quantity, fields):
    names = " and ".join(str(f) for f in fields)
    return (
        f"{quantity.name}: {len(fields)} fields fit equally well: {names}. Say which one is meant: "
        + MAPPING_HINT.format(quantity=quantity.name, name=fields[0].name)
    )


def _apply_mapping(fields, mapping, result):
    by_name = {f.name: f for f in fields}
    chosen = set()
    for key, value in mapping.items():
        if key not in QUANTITIES:
            raise SceneError(
                f"mapping: '{key}' is not a quantity chansim knows; it can be one of: {', '.join(QUANTITIES)}"
            )
        if not value:
            result.refused.add(key)
            result.log.append(f"{key}: left out, by mapping")
            continue
        entry = {"name": value} if isinstance(value, str) else dict(value)
        name = entry.get("name")
        if name not in by_name:
            raise SceneError(f"mapping: {key} = '{name}' is not in the file, which has: {', '.join(by_name)}")
        quantity = QUANTITIES[key]
        if (quantity.place == "levels") != (by_name[name].place == "levels"):
            raise SceneError(
                f"mapping: {key} lies on {quantity.place}, but {by_name[name]} does not; map a field that does"
            )
        _record(result, quantity, by_name[name], entry.get("units", by_name[name].units), "mapping")
        result.mapped.add(key)
        chosen.add(name)
    return chosen


def _record(result, quantity, f, units, reason):
    result.fields[quantity.name] = f
    result.units[quantity.name] = units
    goal = f", for {quantity.serves}" if quantity.serves else ""
    detail = {
        "standard name": f.evidence.get("standard_name"),
        "GRIB parameter": f"{f.evidence.get('param_id')} {f.evidence.get('short_name')}",
        "long name": f.evidence.get("long_name"),
        "short name": f.evidence.get("short_name"),
    }.get(reason, "")
    by = f"{reason} {detail}".strip()
    result.log.append(f"{quantity.name} <- {f.name} [{units or 'no units'}], by {by}{goal}")
