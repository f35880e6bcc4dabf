"""Material constants and laws against published values."""

import numpy as np
import pytest

from sensorgrade import silicon

JANESICK = "Janesick, Scientific Charge-Coupled Devices (2001), ch. 7"
# T [K], Eg [eV], e-/s on 10 um and 15 um pixels at 1 nA/cm², ratio to 300 K
DARK = np.array(
    [
        (300, 1.11082, 6190.6, 13928.8, 1),
        (293.15, 1.11264, 3491.77, 7856.49, 0.564045),
        (283, 1.11528, 1424.24, 3204.53, 0.230064),
        (273, 1.11781, 553.346, 1245.03, 0.0893849),
        (253, 1.12268, 67.4981, 151.871, 0.0109033),
        (233, 1.12728, 5.83594, 13.1309, 9.4271e-4),
        (213, 1.13159, 0.325021, 0.731298, 5.25024e-5),
        (193, 1.13560, 0.0101866, 0.0229199, 1.6455e-6),
        (173, 1.13930, 1.47506e-4, 3.31889e-4, 2.38274e-8),
    ]
)


def test_dark_current_law_against_its_published_form(outside):
    temperature = DARK[:, 0]
    outside(
        "band gap of the dark current law [eV]",
        source=JANESICK,
        standing="confirmed",
        expected=DARK[:, 1],
        found=silicon.dark_current_band_gap(temperature),
        atol=6e-6,
    )
    for column, area in ((2, 1e-6), (3, 2.25e-6)):
        outside(
            f"dark current at 1 nA/cm² on {area:g} cm² [electron/s]",
            source=JANESICK,
            standing="confirmed",
            expected=DARK[:, column],
            found=silicon.dark_current(1.0, area, temperature),
            rtol=1e-4,
        )
    outside(
        "dark current over that at 300 K",
        source=JANESICK,
        standing="derived",
        expected=DARK[:, 4],
        found=silicon.dark_current_ratio(temperature, 300.0),
        rtol=1e-4,
    )


def test_dark_current_slopes(outside):
    temperature = np.array([300.0, 293, 273, 253, 233, 213, 173])
    outside(
        "rise that doubles generation [K]",
        source=JANESICK,
        standing="derived",
        expected=[8.475, 8.104, 7.085, 6.127, 5.233, 4.403, 2.944],
        found=silicon.generation_doubling(temperature),
        atol=6e-4,
    )
    outside(
        "rise that doubles diffusion [K]",
        source=JANESICK,
        standing="derived",
        expected=[4.238, 4.052, 3.542, 3.064, 2.616, 2.201, 1.472],
        found=silicon.diffusion_doubling(temperature),
        atol=6e-4,
    )
    outside(
        "Arrhenius slope of generation [eV]",
        source=JANESICK,
        standing="derived",
        expected=[0.6343, 0.6327, 0.6283, 0.6240, 0.6197, 0.6155, 0.6073],
        found=silicon.generation_slope(temperature),
        atol=6e-5,
    )


def test_generation_slope_is_the_derivative_of_the_law():
    temperature = np.array([180.0, 240.0, 300.0])
    step = 1e-4
    upper, lower = temperature + step, temperature - step
    rise = np.log(silicon.dark_current_ratio(upper, 300.0)) - np.log(
        silicon.dark_current_ratio(lower, 300.0)
    )
    inverse = 1 / (silicon.BOLTZMANN.value * upper) - 1 / (silicon.BOLTZMANN.value * lower)
    np.testing.assert_allclose(silicon.generation_slope(temperature), -rise / inverse, rtol=1e-6)


def test_current_density_in_electrons(outside):
    outside(
        "1 nA/cm² on 10 um and 15 um pixels [electron/s]",
        source="definition of the elementary charge (SI 2019)",
        standing="derived",
        expected=[6241.509, 14043.395],
        found=[
            silicon.current_density_to_electrons(1.0, 1e-6),
            silicon.current_density_to_electrons(1.0, 2.25e-6),
        ],
        rtol=1e-7,
    )


def test_band_gap(outside):
    outside(
        "band gap at 300, 273, 173, 153 K [eV]",
        source="Varshni, Physica 34 (1967) 149",
        standing="from memory",
        expected=[1.12452, 1.13122, 1.15250, 1.15597],
        found=silicon.band_gap(np.array([300.0, 273.0, 173.0, 153.0])),
        atol=6e-6,
    )
    outside(
        "cut-off wavelength for 1.12 and 1.1242 eV [nm]",
        source="h c / e (SI 2019)",
        standing="derived",
        expected=[1107.0, 1102.9],
        found=[silicon.cut_off(1.12), silicon.cut_off(1.1242)],
        atol=0.06,
    )


def test_iron_55_lines(outside):
    outside(
        "Mn K-alpha1, K-alpha2, K-beta [eV], binding energies to 2 eV",
        source="Larkins, At. Data Nucl. Data Tables 20 (1977) 311",
        standing="confirmed",
        expected=[5898.7, 5887.6, 6490.4],
        found=[silicon.K_ALPHA_1.value, silicon.K_ALPHA_2.value, silicon.K_BETA.value],
        atol=0.06,
    )
    outside(
        "mean K-alpha [eV]",
        source="Scofield, At. Data Nucl. Data Tables 14 (1974) 121",
        standing="derived",
        expected=5895.00,
        found=silicon.K_ALPHA.value,
        atol=0.01,
    )
    outside(
        "K-beta over K-alpha intensity",
        source="Scofield, At. Data Nucl. Data Tables 14 (1974) 121",
        standing="derived",
        expected=0.1339,
        found=silicon.K_BETA_TO_K_ALPHA.value,
        atol=6e-5,
    )
    outside(
        "escape peak [eV]",
        source="K-alpha less silicon K-alpha",
        standing="derived",
        expected=4155.0,
        found=silicon.K_ALPHA.value - silicon.SILICON_K_ALPHA.value,
        atol=0.1,
    )


def test_pair_energy_and_fano_factor(outside):
    source = "Ramanathan and Kurinsky, Phys. Rev. D 102 (2020) 063026"
    outside(
        "pair energy at 300, 273, 233, 173, 153 K [eV]",
        source=source,
        standing="confirmed",
        expected=[3.6485, 3.6599, 3.6756, 3.6961, 3.7019],
        found=silicon.pair_energy(np.array([300.0, 273.0, 233.0, 173.0, 153.0])),
        atol=6e-5,
    )
    outside(
        "Fano factor at 300 and 173 K",
        source=source,
        standing="confirmed",
        expected=[0.1163, 0.1155],
        found=silicon.fano_factor(np.array([300.0, 173.0])),
        atol=6e-5,
    )


def test_line_charge(outside):
    lines = [
        silicon.K_ALPHA_1.value,
        silicon.K_ALPHA.value,
        silicon.K_BETA.value,
        silicon.K_ALPHA.value - silicon.SILICON_K_ALPHA.value,
    ]
    outside(
        "charge of K-alpha1, mean K-alpha, K-beta, escape at w = 3.65 eV [electron]",
        source="energy over pair energy",
        standing="derived",
        expected=[1616.10, 1615.07, 1778.21, 1138.4],
        found=[silicon.line_charge(line, 3.65) for line in lines],
        atol=0.06,
    )
    outside(
        "charge of K-alpha1 at w = 3.64, 3.66, 3.70 eV [electron]",
        source="energy over pair energy",
        standing="derived",
        expected=[1620.54, 1611.68, 1594.26],
        found=[silicon.line_charge(silicon.K_ALPHA_1.value, w) for w in (3.64, 3.66, 3.70)],
        atol=0.006,
    )


@pytest.mark.parametrize(
    ("fano", "expected"),
    [
        (0.115, (13.628, 14.517, 16.904)),
        (0.118, (13.805, 14.683, 17.046)),
        (0.120, (13.922, 14.792, 17.141)),
    ],
)
def test_line_width(outside, fano, expected):
    outside(
        f"width of K-alpha with F = {fano} and 0, 5, 10 electrons of read noise [electron]",
        source="FWHM = 2.355 w sqrt(noise² + F E / w), X-ray CCD calibration (SPIE 1996)",
        standing="confirmed",
        expected=expected,
        found=[silicon.line_width(5895.0, 3.65, fano, noise) for noise in (0.0, 5.0, 10.0)],
        atol=6e-4,
    )


def test_absorption_and_reflectance(outside):
    wavelength = np.array([300.0, 400, 500, 600, 700, 800, 900, 1000, 1100, 1200])
    source = "Green, Sol. Energy Mater. Sol. Cells 92 (2008) 1305"
    outside(
        "absorption depth, 300 to 1200 nm [um]",
        source=source,
        standing="confirmed",
        expected=[0.00564, 0.1075, 0.9009, 2.395, 5.291, 11.765, 33.00, 156.3, 2857, 4.55e5],
        found=silicon.absorption_depth(wavelength),
        rtol=1.1e-3,
    )
    outside(
        "reflectance of the bare surface, 300 to 1200 nm",
        source=source,
        standing="derived",
        expected=[0.6289, 0.4876, 0.3872, 0.3542, 0.3374, 0.3274, 0.3210, 0.3165, 0.3132, 0.3108],
        found=silicon.reflectance(wavelength),
        atol=1.1e-4,
    )


def test_trap_constants(outside):
    outside(
        "density of states at 300 K [1/cm³]",
        source="2 (2 pi m k T / h²)^1.5, m = 1.08 m0",
        standing="derived",
        expected=2.816e19,
        found=silicon.density_of_states(300.0),
        rtol=2e-4,
    )
    outside(
        "thermal velocity at 300 K [cm/s]",
        source="sqrt(3 k T / m), m = 0.26 m0",
        standing="derived",
        expected=2.2905e7,
        found=silicon.thermal_velocity(300.0),
        rtol=3e-5,
    )
    outside(
        "gamma for masses 1.08 and 0.26 [1/(cm² s K²)]",
        source="Shockley-Read-Hall emission",
        standing="derived",
        expected=7.168e21,
        found=silicon.emission_rate_factor(),
        rtol=1e-4,
    )


def test_emission_time(outside):
    outside(
        "emission time, 0.41 eV, 2e-15 cm², 153 to 173 K [s]",
        source="Shockley-Read-Hall emission",
        standing="derived",
        expected=[95.3846, 33.4322, 12.4721, 4.92508, 2.04863],
        found=silicon.emission_time(0.41, 2e-15, np.array([153.0, 158, 163, 168, 173])),
        rtol=5e-6,
    )


@pytest.mark.parametrize(
    ("name", "expected"),
    [
        ("Si-A (V-O)", (0.237e-6, 41.8e-9, 10.3e-9)),
        ("VV(=/-)", (44.9e-6, 4.68e-6, 0.759e-6)),
        ("VV(-/0)", (38.2, 0.819, 38.1e-3)),
        ("Si-E (P-V)", (1693, 23.4, 0.770)),
    ],
)
def test_species(outside, name, expected):
    (species,) = (one for one in silicon.SPECIES if one.name == name)
    outside(
        f"emission time of {name} at 153, 173, 193 K [s]",
        source="energies and cross-sections of the pumping literature",
        standing="from memory",
        expected=expected,
        found=silicon.emission_time(
            species.energy, species.cross_section, np.array([153.0, 173.0, 193.0])
        ),
        rtol=5e-3,
    )
