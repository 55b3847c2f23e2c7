"""Writes the small published tables of the sun: `python -m chansim.view.build_tables`.

chansim/data/solar_terms.csv, nutation_terms.csv (Reda and Andreas 2004, tables A4.2 and A4.3, as pvlib holds
them) and solar_irradiance.csv (ASTM E490-00, as sbpy holds it). Needs the extra `build` (pvlib, sbpy).
"""

from importlib import resources
from pathlib import Path

DATA = Path(__file__).parents[1] / "data"
# the first letter is the heliocentric coordinate, the digit the power of time that the sum is multiplied with
SERIES = ("L0", "L1", "L2", "L3", "L4", "L5", "B0", "B1", "R0", "R1", "R2", "R3", "R4")
SHORTEST_UM, LONGEST_UM = 3.2, 16.5


def solar_terms():
    """Lines of the table of periodic terms: series, amplitude [1e-8 rad or au], phase [rad], rate [rad/millennium]."""
    from pvlib import spa

    rows = [
        "# Periodic terms of the Earth's heliocentric longitude L, latitude B and radius R:",
        "# Reda & Andreas 2004, Solar Energy 76, 577-589, table A4.2.",
        "series,amplitude_1e-8,phase_rad,rate_rad_per_millennium",
    ]
    return rows + [f"{s},{a:.10g},{b:.10g},{c:.12g}" for s in SERIES for a, b, c in getattr(spa, s)]


def nutation_terms():
    """Lines of the table of nutation: five multipliers, four coefficients [0.0001 arc seconds]."""
    from pvlib import spa

    rows = [
        "# Periodic terms of the nutation in longitude (a + b T) and obliquity (c + d T):",
        "# Reda & Andreas 2004, Solar Energy 76, 577-589, table A4.3.",
        "y0,y1,y2,y3,y4,a,b,c,d",
    ]
    for multipliers, coefficients in zip(spa.NUTATION_YTERM_ARRAY, spa.NUTATION_ABCD_ARRAY, strict=True):
        rows.append(",".join([f"{y:d}" for y in multipliers.astype(int)] + [f"{v:g}" for v in coefficients]))
    return rows


def solar_irradiance():
    """Lines of the solar spectrum: wavelength [um], irradiance at 1 au [W m-2 um-1]."""
    text = (resources.files("sbpy") / "calib" / "data" / "e490-00a_2014_hires.csv").read_text()
    rows = [
        "# Solar spectral irradiance at 1 au, ASTM E490-00 (air mass zero; solar constant 1366.1 W m-2).",
        "wavelength_um,irradiance_w_m-2_um-1",
    ]
    for line in text.splitlines():
        if line[:1].isdigit():
            wavelength, irradiance = (float(v) for v in line.split())
            if SHORTEST_UM <= wavelength <= LONGEST_UM:
                rows.append(f"{wavelength:g},{irradiance:g}")
    return rows


TABLES = {
    "solar_terms.csv": solar_terms,
    "nutation_terms.csv": nutation_terms,
    "solar_irradiance.csv": solar_irradiance,
}


def main():
    for name, lines in TABLES.items():
        (DATA / name).write_text("\n".join(lines()) + "\n")
        print(DATA / name)


if __name__ == "__main__":
    main()
