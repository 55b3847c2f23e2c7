"""Physical constants: CODATA 2018 (exact SI values where the SI defines them)."""

PLANCK = 6.62607015e-34  # J s
LIGHT_SPEED = 299792458.0  # m s-1
BOLTZMANN = 1.380649e-23  # J K-1
AVOGADRO = 6.02214076e23  # mol-1
GAS_CONSTANT = AVOGADRO * BOLTZMANN  # J mol-1 K-1

# Planck's law in wavenumber: B = C1 nu^3 / (exp(C2 nu / T) - 1), nu in cm-1
FIRST_RADIATION = 2.0 * PLANCK * LIGHT_SPEED**2 * 1e8 * 1e3  # mW m-2 sr-1 cm4
SECOND_RADIATION = PLANCK * LIGHT_SPEED / BOLTZMANN * 100.0  # K cm

STANDARD_GRAVITY = 9.80665  # m s-2 (CGPM 1901)
MOLAR_MASS_DRY_AIR = 28.9647e-3  # kg mol-1 (US Standard Atmosphere 1976, rounded)
MOLAR_MASS_WATER = 18.01528e-3  # kg mol-1
WATER_TO_AIR = MOLAR_MASS_WATER / MOLAR_MASS_DRY_AIR
EARTH_RADIUS = 6371008.8  # m, IUGG mean radius
