"""What a source has and lacks, in words."""

import textwrap

from chansim.scene.columns import make_plan
from chansim.scene.recognition import QUANTITIES
from chansim.scene.units import is_convertible
from chansim.scene.variables import VARIABLES


def defaulted(found, plan, opened):
    """Lines on every variable that is absent and has a default."""
    lines = []
    for variable in VARIABLES.values():
        if not variable.default or variable.name in plan.routes or variable.kind not in ("level", "surface"):
            continue
        lines.append(f"{variable.name}: {_default_in_words(variable, found, plan)}")
    if plan.routes.get("skin_temperature") == "sea_surface_temperature":
        lines.append("skin_temperature over land: " + VARIABLES["skin_temperature"].default)
    lines += [f.evidence["assumed"] for f in found.fields.values() if "assumed" in f.evidence]
    if opened.time is None:
        lines.append("time: not given by the source; the reference atmosphere is the mean of the year")
    return lines


def _default_in_words(variable, found, plan):
    if variable.name == "skin_temperature":
        return "2 m temperature" if "air_temperature_2m" in plan.routes else "temperature of the lowest level"
    if variable.name == "surface_pressure" and {"height", "orography"} <= set(plan.routes):
        return "from the heights of the levels and of the ground, or the pressure of the lowest level"
    return variable.default


def times_in_words(opened):
    """A line on the valid times of a source."""
    if not opened.times:
        return 'Valid time: not given; pass time="..." if it is known'
    if len(opened.times) == 1:
        return f"Valid time: {opened.times[0]}"
    return f"Valid times: {len(opened.times)}, {opened.times[0]} to {opened.times[-1]}; shown here: {opened.time}"


def grid_in_words(pressure, grid):
    """A line on the columns and levels of a scene."""
    size = " x ".join(str(n) for n in grid.latitude.shape)
    mapping = grid.crs.to_cf().get("grid_mapping_name", grid.crs.name) if grid.crs else "no grid mapping"
    profile = pressure if pressure.ndim == 1 else pressure.mean([d for d in pressure.dims if d != "level"])
    lat, lon = grid.latitude.values, grid.longitude.values
    return (
        f"Columns: {size} ({mapping}), latitude {lat.min():.2f} to {lat.max():.2f}, longitude {lon.min():.2f} to "
        f"{lon.max():.2f}; {pressure.sizes['level']} levels, {float(profile[0]) / 100:g} to "
        f"{float(profile[-1]) / 100:g} hPa"
    )


def found_in_words(opened, found, notes):
    """Lines on what was recognised, what is left over, and what is assumed for the rest, with a mapping to fill in."""
    lines = ["", "Recognised:", *(f"  {line}" for line in found.log)]
    parts = {part.name for f in found.fields.values() for part in f.parts}
    unused = [f for f in found.unused if f.name not in parts]
    if unused:
        lines += ["", "Not used:", *(f"  {f}" for f in unused)]
    plan = make_plan(found)
    lines += ["", "Missing, and what is assumed instead:", *(f"  {x}" for x in defaulted(found, plan, opened) + notes)]
    return lines + _how_to_supply(plan, unused)


def _how_to_supply(plan, unused):
    """A mapping file to fill in, with fields of the right place and units where the source has some to spare."""
    lines = ["", "To supply one of these, add it to the source with its standard name, or keep lines like these in a"]
    lines += ['file my_model.toml and say open_scene(source, mapping="my_model.toml"):', "  [variables]"]
    for variable in VARIABLES.values():
        wanted = variable.default or variable.name in ("temperature", "specific_humidity")
        if variable.kind not in ("level", "surface") or not wanted or variable.name in plan.routes:
            continue
        candidates = [f.name for f in unused if _may_be(variable, f)]
        if candidates or variable.name in _OFTEN_SUPPLIED:
            comment = f"   # perhaps {', '.join(candidates[:6])}" if candidates else ""
            lines.append(f'  {variable.name} = "NAME"{comment}')
    names = f"quantities: {', '.join(QUANTITIES)}"
    lines += textwrap.wrap(names, 100, initial_indent="  # ", subsequent_indent="  # ")
    return lines


# offered as an example even when nothing in the source looks like it
_OFTEN_SUPPLIED = (
    "temperature",
    "specific_humidity",
    "skin_temperature",
    "cloud_liquid",
    "cloud_ice",
    "cloud_fraction",
)


def _may_be(variable, f):
    """True when a left-over field has the place and the units of a variable; units of 1 tell nothing."""
    if (
        variable.units == "1"
        or not str(f.units or "").strip(" 1-")
        or (f.place == "levels") != (variable.kind == "level")
    ):
        return False
    if variable.kind == "surface" and f.place not in ("surface", "single"):
        return False
    return is_convertible(f.units, variable.units)
