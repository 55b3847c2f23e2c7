"""Recipe of data/reference_atmospheres.nc: `python -m chansim.scene.build_reference`.

Takes five of the AFGL 1986 model atmospheres (Anderson et al. 1986, AFGL-TR-86-0110, public domain) from
the `joseki` package, puts them on one pressure grid and scales the long-lived gases to present-day values.
Needed only to rebuild the file: `pip install chansim[build]`.
"""

import argparse

import numpy as np

from chansim.scene.reference_atmosphere import ATMOSPHERES, DATA_FILE, GASES

TOP_PRESSURE = 5.0  # Pa
BOTTOM_PRESSURE = 110000.0  # Pa
LEVELS = 201
# present-day mole fractions near the surface; the defaults named in scene/variables.py
PRESENT_SURFACE = {
    "carbon_dioxide_mole_fraction": 420e-6,
    "methane_mole_fraction": 1.92e-6,
    "nitrous_oxide_mole_fraction": 337e-9,
}
_FORMULA = {
    "water_mole_fraction": "H2O", "ozone_mole_fraction": "O3", "carbon_dioxide_mole_fraction": "CO2",
    "nitrous_oxide_mole_fraction": "N2O", "methane_mole_fraction": "CH4", "carbon_monoxide_mole_fraction": "CO",
}  # fmt: skip


def pressure_grid():
    """Levels from top to bottom, evenly spaced in ln p [Pa]."""
    return np.geomspace(TOP_PRESSURE, BOTTOM_PRESSURE, LEVELS)


def on_pressure_grid(pressure, values, grid, spacing):
    """One profile on the grid; constant below its lowest level.

    pressure, values : 1-D arrays of the source profile; grid : 1-D array [Pa]
    spacing : "linear" or "logarithmic" interpolation of the values, in ln p
    """
    order = np.argsort(pressure)
    x, y = np.log(pressure[order]), values[order]
    if spacing == "logarithmic":
        return np.exp(np.interp(np.log(grid), x, np.log(y)))
    return np.interp(np.log(grid), x, y)


def build():
    """Dataset of the reference atmospheres (see the module docstring)."""
    import joseki
    import xarray as xr

    grid = pressure_grid()
    names = ["temperature", *GASES]
    columns = {name: np.empty((len(ATMOSPHERES), LEVELS), dtype=np.float32) for name in names}
    for i, atmosphere in enumerate(ATMOSPHERES):
        source = joseki.make(f"afgl_1986-{atmosphere}")
        pressure = source["p"].values
        columns["temperature"][i] = on_pressure_grid(pressure, source["t"].values, grid, "linear")
        for gas in GASES:
            fraction = source[f"x_{_FORMULA[gas]}"].values
            if gas in PRESENT_SURFACE:
                fraction = fraction * PRESENT_SURFACE[gas] / fraction[np.argmax(pressure)]
            columns[gas][i] = on_pressure_grid(pressure, fraction, grid, "logarithmic")
    units = {"temperature": "K"}
    variables = {
        name: (("atmosphere", "level"), values, {"units": units.get(name, "1")}) for name, values in columns.items()
    }
    variables["pressure"] = ("level", grid, {"units": "Pa", "standard_name": "air_pressure"})
    return xr.Dataset(
        variables,
        coords={"atmosphere": list(ATMOSPHERES)},
        attrs={
            "title": "AFGL 1986 model atmospheres on common pressure levels, present-day long-lived gases",
            "source": "Anderson et al. 1986, AFGL-TR-86-0110, as shipped by the joseki package",
            "recipe": "python -m chansim.scene.build_reference",
            "method": "temperature linear and mole fractions logarithmic in ln p; constant below the lowest level",
        },
    )


def main(arguments=None):
    """Writes the file; returns its path."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("output", nargs="?", default=str(DATA_FILE))
    output = parser.parse_args(arguments).output
    dataset = build()
    encoding = {name: {"zlib": True, "complevel": 9} for name in dataset.data_vars}
    dataset.to_netcdf(output, engine="netcdf4", encoding=encoding)
    return output


if __name__ == "__main__":
    print(main())
