"""Physical constants in cgs units, and the solar values that the whole package refers to.

Numbers without another source are CODATA 2018 (Tiesinga et al. 2021, Rev. Mod. Phys. 93, 025010); those fixed by the
SI since 2019 are exact.
"""

from __future__ import annotations

BOLTZMANN_ERG_K = 1.380649e-16  # erg / K, exact
PLANCK_ERG_S = 6.62607015e-27  # erg s, exact
LIGHT_SPEED_CM_S = 2.99792458e10  # cm / s, exact
ELECTRON_CHARGE_ESU = 4.803204712570263e-10  # statcoulomb
ELECTRON_MASS_G = 9.1093837015e-28  # g
PROTON_MASS_G = 1.67262192369e-24  # g
ATOMIC_MASS_G = 1.66053906660e-24  # g, unified atomic mass unit
EV_ERG = 1.602176634e-12  # erg / eV, exact
BOHR_RADIUS_CM = 5.29177210903e-9  # cm
RYDBERG_CM = 109737.31568160  # cm^-1, infinite nuclear mass
RYDBERG_EV = 13.605693122994  # eV, infinite nuclear mass
STEFAN_BOLTZMANN = 5.670374419e-5  # erg / cm^2 / s / K^4
RADIATION_CONSTANT = 4.0 * STEFAN_BOLTZMANN / LIGHT_SPEED_CM_S  # erg / cm^3 / K^4
THOMSON_CM2 = 6.6524587321e-25  # cm^2

BOLTZMANN_EV_K = BOLTZMANN_ERG_K / EV_ERG  # eV / K
HC_ERG_CM = PLANCK_ERG_S * LIGHT_SPEED_CM_S  # erg cm
HC_EV_CM = HC_ERG_CM / EV_ERG  # eV cm; energy [eV] = HC_EV_CM / wavelength [cm]
RADIATION_C2_CM_K = HC_ERG_CM / BOLTZMANN_ERG_K  # cm K, second radiation constant
SAHA_CONSTANT = (
    2.0 * 3.141592653589793 * ELECTRON_MASS_G * BOLTZMANN_ERG_K / PLANCK_ERG_S**2
) ** 1.5  # cm^-3 K^-3/2, (2 pi m_e k / h^2)^(3/2)

ANGSTROM_CM = 1e-8  # cm / Angstrom
KM_CM = 1e5  # cm / km

SOLAR_IRON = 7.46  # log10(N_Fe/N_H) + 12, Asplund, Amarsi & Grevesse 2021, A&A 653, A141
SOLAR_TEFF = 5772.0  # K, nominal, IAU 2015 resolution B3
SOLAR_LOGG = 4.438  # log10 of cm / s^2, from the nominal GM and radius of IAU 2015 resolution B3
