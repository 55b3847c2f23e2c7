"""Effective radius of condensate by published parametrisations, one formula per function.

Contents are in-cloud mass per volume of air [kg m-3], temperatures [K], results [m].
Coefficients are from memory of the papers named; tests hold them to values worked by hand.
"""

import numpy as np

WATER_DENSITY, ICE_DENSITY = 1000.0, 917.0  # kg m-3
LAND_DROPLETS, SEA_DROPLETS = 300e6, 100e6  # m-3, common practice


def volume_radius(content, number, density):
    """Radius of the sphere of mean volume [m]; content [kg m-3], number [m-3], density [kg m-3]."""
    return np.cbrt(3.0 * content / (4.0 * np.pi * density * number))


def hexagonal_radius_ratio(aspect_ratio):
    """Radius of equal volume-to-area ratio over radius of equal volume, of a hexagonal prism [1].

    aspect_ratio : length over width (twice the side of the hexagon) [1]

    For side 1: volume 3 sqrt(3) x aspect ratio, surface 3 sqrt(3) + 12 x aspect ratio; radii 3 V / A and
    cbrt(3 V / (4 pi)). Source: geometry, as used by Neshyba, Grenfell & Warren 2003 (J. Geophys. Res. 108, 4448).
    """
    volume = 3.0 * np.sqrt(3.0) * aspect_ratio
    surface = 3.0 * np.sqrt(3.0) + 12.0 * aspect_ratio
    return 3.0 * volume / surface / np.cbrt(3.0 * volume / (4.0 * np.pi))


def liquid_martin_1994(content, land_fraction):
    """Martin, Johnson & Spice 1994 (J. Atmos. Sci. 51, 1823): r_e = r_v / cbrt(k), k = 0.80 sea, 0.67 land [m].

    Droplet numbers are 100 cm-3 over sea and 300 cm-3 over land (common practice).
    """
    sea = volume_radius(content, SEA_DROPLETS, WATER_DENSITY) / np.cbrt(0.80)
    land = volume_radius(content, LAND_DROPLETS, WATER_DENSITY) / np.cbrt(0.67)
    return sea + (land - sea) * land_fraction


def dispersion_factor(number):
    """Rotstayn & Liu 2003 (J. Climate 16, 3476): r_e / r_v from the droplet number [m-3] [1]."""
    dispersion = 1.0 - 0.7 * np.exp(-0.003 * number * 1e-6)
    return np.cbrt((1.0 + 2.0 * dispersion**2) ** 2 / (1.0 + dispersion**2))


def liquid_rotstayn_2003(content, land_fraction):
    """Rotstayn & Liu 2003: the width of the spectrum grows with the droplet number (100 and 300 cm-3) [m]."""
    sea = volume_radius(content, SEA_DROPLETS, WATER_DENSITY) * dispersion_factor(SEA_DROPLETS)
    land = volume_radius(content, LAND_DROPLETS, WATER_DENSITY) * dispersion_factor(LAND_DROPLETS)
    return sea + (land - sea) * land_fraction


def liquid_fixed(content, land_fraction):
    """8 um over land, 13 um over sea (common practice) [m]."""
    return np.broadcast_to(13e-6 - 5e-6 * land_fraction, np.shape(content)).copy()


WYSER_B = (-6.0, -2.0)  # where the published cubic gives 10.5 to 103.5 um; below -6.95 it is negative


def ice_wyser_1998(content, temperature):
    """Wyser 1998 (J. Climate 11, 1793), eq. 14: from content and temperature [m].

    B = -2 + 1e-3 (273 - T)**1.5 log10(IWC / 50 g m-3), r_e = 377.4 + 203.3 B + 37.91 B**2 + 2.3696 B**3 um.
    Valid for B within `WYSER_B`, 10.5 to 103.5 um, and held there: -2 is reached at 273 K, -6 only by traces of
    ice in very cold air (less than 2e-5 g m-3 at 200 K).
    """
    grams = np.maximum(content * 1e3, 1e-9)
    b = -2.0 + 1e-3 * np.maximum(273.0 - temperature, 0.0) ** 1.5 * np.log10(grams / 50.0)
    b = np.clip(b, *WYSER_B)
    return 1e-6 * (377.4 + b * (203.3 + b * (37.91 + 2.3696 * b)))


def ice_sun_2001(content, temperature):
    """Sun & Rikus 1999 (Q. J. R. Meteorol. Soc. 125, 3037), revised by Sun 2001 (127, 267) [m].

    The papers give a generalised effective diameter; radius = 3 sqrt(3) / 8 x diameter (Fu 1996, J. Climate 9).
    """
    grams = np.maximum(content * 1e3, 1e-9)
    celsius = temperature - 273.15
    diameter = (1.2351 + 0.0105 * celsius) * (45.8966 * grams**0.2214 + 0.7957 * grams**0.2535 * (temperature - 83.15))
    return 1e-6 * 3.0 * np.sqrt(3.0) / 8.0 * np.maximum(diameter, 1.0)


LIQUID_RADIUS = {"martin-1994": liquid_martin_1994, "rotstayn-2003": liquid_rotstayn_2003, "fixed": liquid_fixed}
ICE_RADIUS = {"sun-2001": ice_sun_2001, "wyser-1998": ice_wyser_1998}


def exponential_radius(content, intercept, particle_density, material_density):
    """Effective radius of exponentially distributed particles [m].

    n(D) = N0 exp(-slope D) (Marshall & Palmer 1948, J. Meteorol. 5, 165): slope = (pi rho N0 / content)**(1/4),
    r_e = 3 / (2 slope), times particle over material density for fluffy particles (equal volume-to-area spheres
    of solid material). content [kg m-3], intercept N0 [m-4], densities [kg m-3]
    """
    slope = (np.pi * particle_density * intercept / np.maximum(content, 1e-12)) ** 0.25
    return 1.5 / slope * particle_density / material_density


# intercept [m-4], density of the particle [kg m-3] and of its material: Marshall & Palmer 1948 for rain,
# Gunn & Marshall 1958 / Lin et al. 1983 for snow, Rutledge & Hobbs 1984 for graupel (values from memory)
PRECIPITATION = {
    "rain": (8e6, WATER_DENSITY, WATER_DENSITY),
    "snow": (3e6, 100.0, ICE_DENSITY),
    "graupel": (4e6, 400.0, ICE_DENSITY),
}
