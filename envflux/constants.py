"""Numbers with a source. Value, unit in the name, source and year on the line above."""

# IAU 2012 Resolution B2: the astronomical unit, exact.
AU_KM = 149_597_870.7

# IAU 2015 Resolution B3: nominal solar radius, exact by definition.
SUN_RADIUS_KM = 695_700.0

# IAU 2015 Resolution B3: nominal total solar irradiance at 1 au, exact by definition.
SOLAR_CONSTANT_W_M2 = 1361.0

# CODATA 2018: Stefan-Boltzmann constant (exact in the SI of 2019).
STEFAN_BOLTZMANN_W_M2_K4 = 5.670374419e-8

# Mean tropical year in days (IAU 2006 precession, J2000.0): the pace of a Sun-synchronous node.
TROPICAL_YEAR_DAYS = 365.2421897

SECONDS_PER_DAY = 86_400.0
