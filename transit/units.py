"""Constants, and conversion of users' units to internal ones; conversion happens at the boundary only.

Internal units: wavelength in micrometre, depth as a fraction, length in cm inside the opacity model and km in
reports, pressure in bar, temperature in kelvin.

Constants: CODATA 2018/2022 and IAU 2015 Resolution B3 nominal values (Prsa et al. 2016, AJ 152, 41).
"""

BOLTZMANN_J_K = 1.380649e-23
GRAVITATION_SI = 6.67430e-11
ATOMIC_MASS_KG = 1.66053907e-27
PLANCK_J_S = 6.62607015e-34
LIGHT_SPEED_M_S = 299792458.0
SECOND_RADIATION_CM_K = 1.438776877

SOLAR_RADIUS_M = 6.957e8
EARTH_RADIUS_M = 6.3781e6  # equatorial
JUPITER_RADIUS_M = 7.1492e7  # equatorial: the volumetric mean would change depths by 4.5 per cent
SOLAR_MASS_KG = 1.98841e30
JUPITER_MASS_KG = 1.89812e27
EARTH_MASS_KG = 5.97217e24
ASTRONOMICAL_UNIT_M = 149597870700.0

PPM = 1e-6
ATM_BAR = 1.01325
