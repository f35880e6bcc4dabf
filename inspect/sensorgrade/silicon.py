"""Constants and laws of silicon as a detector, each with value, uncertainty, unit and source.

Temperatures are absolute [K], energies [eV], lengths [um] and wavelengths [nm] unless a unit is
named. Functions take numbers or arrays. Nothing here knows of frames or devices.
"""

from dataclasses import dataclass
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

Numbers = TypeVar("Numbers", float, NDArray[np.float64])

ZERO_CELSIUS = 273.15  # K, exact by definition
LN2 = 0.6931471805599453


@dataclass(frozen=True, slots=True)
class Constant:
    """A constant with its standard uncertainty (0 where exact by definition) and its source."""

    name: str
    value: float
    uncertainty: float
    unit: str
    source: str


SI = "SI, 9th edition (2019), exact"
CODATA = "CODATA 2022"

BOLTZMANN = Constant("Boltzmann constant", 8.617333262e-5, 0.0, "eV / K", SI)
ELEMENTARY_CHARGE = Constant("elementary charge", 1.602176634e-19, 0.0, "C", SI)
BOLTZMANN_JOULE = Constant("Boltzmann constant", 1.380649e-23, 0.0, "J / K", SI)
PLANCK = Constant("Planck constant", 6.62607015e-34, 0.0, "J s", SI)
ELECTRON_MASS = Constant("electron mass", 9.1093837139e-31, 2.8e-40, "kg", CODATA)
PHOTON_ENERGY_WAVELENGTH = Constant("h c / e", 1239.841984, 0.0, "eV nm", SI)

# Dark current -------------------------------------------------------------------------------

JANESICK = "J. R. Janesick, Scientific Charge-Coupled Devices, SPIE Press 2001, ch. 7"
DARK_CURRENT_FACTOR = Constant(
    # nA/cm² at 300 K to e-/s; with the SI charge the conversion is 2.571e15 (0.8 % more)
    "dark current factor",
    2.55e15,
    0.02e15,
    "electron / (s nA K^1.5)",
    JANESICK,
)
RAJKANAN_GAP = Constant(
    "band gap at 0 K in the dark current law",
    1.1557,
    0.005,
    "eV",
    "K. Rajkanan, R. Singh, J. Shewchun, Solid-State Electron. 22 (1979) 793",
)
VARSHNI_GAP = Constant(
    "band gap at 0 K", 1.17, 0.001, "eV", "Y. P. Varshni, Physica 34 (1967) 149, usual constants"
)


def dark_current_band_gap(temperature: Numbers) -> Numbers:
    """Band gap [eV] that belongs to the dark current law; 14 meV below `band_gap`."""
    return RAJKANAN_GAP.value - 7.021e-4 * temperature**2 / (1108.0 + temperature)


def band_gap(temperature: Numbers) -> Numbers:
    """Band gap [eV] by Varshni's formula, 1.17 - 4.73e-4 T² / (T + 636)."""
    return VARSHNI_GAP.value - 4.73e-4 * temperature**2 / (temperature + 636.0)


def _generation(temperature: Numbers) -> Numbers:
    """Temperature dependence of generation in the depleted silicon, T^1.5 exp(-Eg / 2kT)."""
    exponent = -dark_current_band_gap(temperature) / (2 * BOLTZMANN.value * temperature)
    result: Numbers = temperature**1.5 * np.exp(exponent)
    return result


def dark_current(current_density: float, area: float, temperature: Numbers) -> Numbers:
    """Dark current [electron/s] of one pixel from generation in the depletion region.

    Parameters
    ----------
    current_density : float [nA/cm²], at 300 K
    area : float [cm²]
    temperature : float or ndarray [K]

    Notes
    -----
    D = 2.55e15 N A T^1.5 exp(-Eg / 2kT). Diffusion from the undepleted silicon, which follows
    the full gap and can dominate above about 270 K, is not part of it.

    References
    ----------
    J. R. Janesick, Scientific Charge-Coupled Devices, SPIE Press 2001, chapter 7.
    """
    return DARK_CURRENT_FACTOR.value * current_density * area * _generation(temperature)


def dark_current_ratio(temperature: Numbers, reference: float) -> Numbers:
    """Dark current at ``temperature`` over that at ``reference`` [K], by the law above."""
    return _generation(temperature) / _generation(reference)


def generation_slope(temperature: Numbers) -> Numbers:
    """-d ln D / d(1/kT) of the generation law [eV]: what an Arrhenius plot shows at T.

    It is (Eg - T dEg/dT) / 2 + 3/2 kT, and with Eg = E0 - a T² / (b + T) the bracket is
    E0 + a b T² / (b + T)².
    """
    bracket = RAJKANAN_GAP.value + 7.021e-4 * 1108.0 * (temperature / (1108.0 + temperature)) ** 2
    return bracket / 2 + 1.5 * BOLTZMANN.value * temperature


def generation_doubling(temperature: Numbers) -> Numbers:
    """Temperature rise [K] that doubles the generation current, locally."""
    slope = generation_slope(temperature)
    return LN2 * BOLTZMANN.value * temperature**2 / slope


def diffusion_doubling(temperature: Numbers) -> Numbers:
    """Temperature rise [K] that doubles a diffusion current T³ exp(-Eg / kT), locally."""
    return generation_doubling(temperature) / 2


def current_density_to_electrons(current_density: float, area: float) -> float:
    """Electrons per second that ``current_density`` [nA/cm²] makes on ``area`` [cm²]."""
    return current_density * 1e-9 * area / ELEMENTARY_CHARGE.value


# X-rays ---------------------------------------------------------------------------------------

MANGANESE = "manganese K series, reference values of X-ray wavelength tables (2003), from memory"
RATES = "J. H. Scofield, At. Data Nucl. Data Tables 14 (1974) 121"
K_ALPHA_1 = Constant("Mn K-alpha1", 5898.75, 0.01, "eV", MANGANESE)
K_ALPHA_2 = Constant("Mn K-alpha2", 5887.65, 0.01, "eV", MANGANESE)
K_BETA = Constant("Mn K-beta", 6490.45, 0.05, "eV", MANGANESE)
K_ALPHA_1_RATE = Constant("Mn K-L3 rate", 0.58416, 0.006, "", RATES)
K_ALPHA_2_RATE = Constant("Mn K-L2 rate", 0.29776, 0.003, "", RATES)
K_BETA_RATE = Constant("Mn K-M rate", 0.11808, 0.0012, "", RATES)
SILICON_K_ALPHA = Constant("Si K-alpha, lost in escape", 1740.0, 0.1, "eV", "X-ray tables")
K_ALPHA = Constant(
    "Mn K-alpha, weighted mean of the two lines",
    (K_ALPHA_1.value * K_ALPHA_1_RATE.value + K_ALPHA_2.value * K_ALPHA_2_RATE.value)
    / (K_ALPHA_1_RATE.value + K_ALPHA_2_RATE.value),
    0.06,
    "eV",
    "from the two lines and their rates",
)
K_BETA_TO_K_ALPHA = Constant(
    "Mn K-beta intensity over K-alpha",
    K_BETA_RATE.value / (K_ALPHA_1_RATE.value + K_ALPHA_2_RATE.value),
    0.002,
    "",
    RATES,
)
XCOM = "photon cross-section tables, photoelectric, 2.329 g/cm³"
K_ALPHA_DEPTH = Constant("attenuation length at 5.895 keV", 28.0, 0.5, "um", XCOM)
K_BETA_DEPTH = Constant("attenuation length at 6.490 keV", 36.9, 0.7, "um", XCOM)

RAMANATHAN = "K. Ramanathan, N. Kurinsky, Phys. Rev. D 102 (2020) 063026"
PAIR_ENERGY_RELATIVE_UNCERTAINTY = Constant(
    "relative standard uncertainty of the pair energy", 0.005, 0.0, "", RAMANATHAN + ", estimated"
)
FANO_UNCERTAINTY = Constant(
    "standard uncertainty of the Fano factor", 0.003, 0.0, "", "spread of published values"
)


def pair_energy(temperature: Numbers) -> Numbers:
    """Mean energy for one electron-hole pair [eV], w = 1.7 Eg + 0.084 A + 1.3, A = 5.2 eV²."""
    return 1.7 * band_gap(temperature) + 0.084 * 5.2 + 1.3


def fano_factor(temperature: Numbers) -> Numbers:
    """Fano factor, F = -0.028 Eg + 0.0015 A + 0.14, A = 5.2 eV²."""
    return -0.028 * band_gap(temperature) + 0.0015 * 5.2 + 0.14


def line_charge(energy: float, pair: float) -> float:
    """Charge [electron] of a photon of ``energy`` at ``pair`` energy, both [eV]."""
    return energy / pair


def line_width(energy: float, pair: float, fano: float, read_noise: float) -> float:
    """Standard deviation [electron] of a line: Fano noise joined with ``read_noise`` [electron]."""
    return float(np.sqrt(read_noise**2 + fano * energy / pair))


# Optics ---------------------------------------------------------------------------------------

GREEN = "M. A. Green, Sol. Energy Mater. Sol. Cells 92 (2008) 1305, 300 K"
# wavelength [nm], refractive index n, extinction k
_OPTICAL = np.array(
    [
        (300, 4.976, 4.234),
        (350, 5.494, 2.938),
        (400, 5.613, 0.296),
        (450, 4.691, 0.086302),
        (500, 4.294, 0.044165),
        (550, 4.077, 0.027968),
        (600, 3.940, 0.019934),
        (650, 3.844, 0.014431),
        (700, 3.772, 0.010528),
        (750, 3.717, 7.8185e-3),
        (800, 3.675, 5.4113e-3),
        (850, 3.641, 3.6120e-3),
        (900, 3.614, 2.1701e-3),
        (950, 3.591, 1.1793e-3),
        (1000, 3.572, 5.0930e-4),
        (1050, 3.556, 1.3620e-4),
        (1100, 3.542, 3.0637e-5),
        (1200, 3.520, 2.1008e-7),
    ]
)


def refractive_index(wavelength: Numbers) -> Numbers:
    """Refractive index at 300 K, interpolated in the table of Green (2008), 300 to 1200 nm."""
    result: Numbers = np.interp(wavelength, _OPTICAL[:, 0], _OPTICAL[:, 1])
    return result


def extinction(wavelength: Numbers) -> Numbers:
    """Extinction coefficient at 300 K, its logarithm interpolated, 300 to 1200 nm."""
    result: Numbers = np.exp(np.interp(wavelength, _OPTICAL[:, 0], np.log(_OPTICAL[:, 2])))
    return result


def absorption_depth(wavelength: Numbers) -> Numbers:
    """Depth [um] at which light has fallen to 1/e, wavelength / (4 pi k)."""
    return wavelength * 1e-3 / (4 * np.pi * extinction(wavelength))


def reflectance(wavelength: Numbers) -> Numbers:
    """Reflected fraction of a bare surface at normal incidence (Fresnel)."""
    n, k = refractive_index(wavelength), extinction(wavelength)
    return ((n - 1) ** 2 + k**2) / ((n + 1) ** 2 + k**2)


def cut_off(gap: float) -> float:
    """Longest wavelength [nm] that lifts an electron over ``gap`` [eV]."""
    return PHOTON_ENERGY_WAVELENGTH.value / gap


# Traps ----------------------------------------------------------------------------------------

DENSITY_MASS = Constant(
    "electron mass for the density of states over the free mass", 1.08, 0.05, "", "textbook value"
)
CONDUCTIVITY_MASS = Constant(
    "electron mass for the thermal velocity over the free mass", 0.26, 0.02, "", "textbook value"
)


def density_of_states(temperature: Numbers) -> Numbers:
    """Effective density of states of the conduction band [1/cm³], 2 (2 pi m k T / h²)^1.5."""
    mass = DENSITY_MASS.value * ELECTRON_MASS.value
    thermal = 2 * np.pi * mass * BOLTZMANN_JOULE.value * temperature / PLANCK.value**2
    result: Numbers = 2e-6 * thermal**1.5
    return result


def thermal_velocity(temperature: Numbers) -> Numbers:
    """Thermal velocity of electrons [cm/s], sqrt(3 k T / m)."""
    mass = CONDUCTIVITY_MASS.value * ELECTRON_MASS.value
    result: Numbers = 100 * np.sqrt(3 * BOLTZMANN_JOULE.value * temperature / mass)
    return result


def emission_rate_factor() -> float:
    """Factor gamma [1/(cm² s K²)] in tau T² = exp(E/kT) / (gamma sigma), for the masses above."""
    return density_of_states(1.0) * thermal_velocity(1.0)


def emission_time(energy: float, cross_section: float, temperature: Numbers) -> Numbers:
    """Mean time [s] for which a trap holds an electron (Shockley, Read, Hall).

    Parameters
    ----------
    energy : float [eV], below the conduction band
    cross_section : float [cm²]
    temperature : float or ndarray [K]

    Notes
    -----
    tau = exp(E / kT) / (sigma v_th N_c), entropy and field factors taken as 1. A cross-section
    found with other masses differs by up to a factor of 7; the energy does not.
    """
    rate = cross_section * thermal_velocity(temperature) * density_of_states(temperature)
    result: Numbers = np.exp(energy / (BOLTZMANN.value * temperature)) / rate
    return result


@dataclass(frozen=True, slots=True)
class Species:
    """A known trap of n-channel silicon.

    ``energy`` and its range lie below the conduction band [eV]; ``cross_section`` [cm²] is known
    to a factor of about 3.
    """

    name: str
    energy: float
    energy_range: tuple[float, float]
    cross_section: float
    source: str


_SPECIES = "pumping literature, e.g. D. J. Hall et al., IEEE Trans. Nucl. Sci. 61 (2014) 1826"
SPECIES = (
    Species("Si-A (V-O)", 0.17, (0.16, 0.18), 1e-14, _SPECIES),
    Species("VV(=/-)", 0.23, (0.21, 0.25), 5e-15, _SPECIES),
    Species("unidentified", 0.32, (0.30, 0.34), 5e-15, _SPECIES),
    Species("VV(-/0)", 0.41, (0.39, 0.43), 5e-15, _SPECIES),
    Species("Si-E (P-V)", 0.46, (0.44, 0.47), 5e-15, _SPECIES),
)
CROSS_SECTION_FACTOR = 3.0  # by which a published cross-section may be off either way

# Particles ------------------------------------------------------------------------------------

MUON_RATE = Constant(
    "muons through a horizontal surface at sea level", 1.0, 0.1, "1 / (cm2 min)", "PDG, review"
)
MINIMUM_IONISING_CHARGE = Constant(
    "charge along a minimum-ionising track", 80.0, 10.0, "electron / um", "rule of the trade"
)
