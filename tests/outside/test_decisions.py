"""Decisions, risks, capability, repeatability and sampling against published examples."""

import numpy as np
import pytest
from astropy.stats import binom_conf_interval
from scipy import stats

from sensorgrade.defects.defect import DefectCount
from sensorgrade.grading.capability import capability
from sensorgrade.grading.conformity import (
    count_probability,
    guard_factor,
    probability_of_conformity,
)
from sensorgrade.grading.interval import clopper_pearson, wilson
from sensorgrade.grading.repeatability import repeatability, share_of_tolerance
from sensorgrade.grading.risk import global_risks
from sensorgrade.grading.rule import outcome
from sensorgrade.grading.sampling_plan import SamplingPlan, standard_plan

JCGM = "JCGM 106:2012"
ILAC = "ILAC-G8:09/2019"
MSA = "AIAG Measurement Systems Analysis 2010"
ISO = "ISO 2859-1:1999"


def test_conformity_table(outside):
    z = np.array([0.8416, 1.2816, 1.6449, 1.9600, 2.3263, 3.0902])
    found = [probability_of_conformity(-one, 1.0, upper=0.0) for one in z]
    outside(
        "conformance probability at tabulated z",
        source=f"{JCGM}, 7.3 table 1",
        standing="derived",
        expected=[0.80, 0.90, 0.95, 0.975, 0.99, 0.999],
        found=found,
        atol=1.5e-5,
    )
    outside(
        "guard factor at tabulated confidence",
        source=f"{JCGM}, 7.3 table 1",
        standing="derived",
        expected=z,
        found=[guard_factor(p) for p in (80.0, 90.0, 95.0, 97.5, 99.0, 99.9)],
        atol=5e-5,
    )


@pytest.mark.parametrize(
    "what, value, doubt, limits, expected",
    [
        ("breakdown voltage of a diode", -5.47, 0.05, {"upper": -5.40}, 0.919243),
        ("burst pressure of a container", 509.7, 8.6, {"lower": 490.0}, 0.989010),
        ("viscosity of an oil", 13.6, 1.8, {"lower": 12.5, "upper": 16.3}, 0.662630),
    ],
)
def test_conformity_examples_of_the_guide(outside, what, value, doubt, limits, expected):
    outside(
        f"conformance probability, {what}",
        source=f"{JCGM}, examples of clause 7 (inputs from memory, results derived)",
        standing="from memory",
        expected=expected,
        found=probability_of_conformity(value, doubt, **limits),
        atol=5e-7,
    )


def test_conformity_against_an_independent_library(outside):
    rng = np.random.default_rng(1)
    value, doubt = rng.normal(0.0, 2.0, 200), rng.uniform(0.1, 2.0, 200)
    for name, degrees, law in (
        ("normal", None, stats.norm),
        ("Student, 5 degrees", 5, stats.t(5)),
    ):
        pairs = list(zip(value, doubt, strict=True))
        outside(
            f"conformance probability of a range, {name}",
            source="scipy.stats",
            standing="library",
            expected=law.cdf((1.0 - value) / doubt) - law.cdf((-1.0 - value) / doubt),
            found=[
                probability_of_conformity(y, u, lower=-1.0, upper=1.0, degrees=degrees)
                for y, u in pairs
            ],
            atol=1e-12,
        )


def test_read_noise_near_its_limit(outside):
    outside(
        "read noise <= 5.0 with u = 0.2 at 4.7, 4.5, 5.1, 5.5",
        source="normal integral",
        standing="derived",
        expected=[0.933193, 0.993790, 0.308538, 0.006210],
        found=[probability_of_conformity(y, 0.2, upper=5.0) for y in (4.7, 4.5, 5.1, 5.5)],
        atol=5e-7,
    )
    outside(
        "the same at 4.7 with 5 degrees of freedom",
        source="Student's t",
        standing="derived",
        expected=0.903048,
        found=probability_of_conformity(4.7, 0.2, upper=5.0, degrees=5),
        atol=5e-7,
    )
    outside(
        "gain within 0.24 to 0.26 at 0.2585 with u = 0.001",
        source="normal integral",
        standing="derived",
        expected=0.933193,
        found=probability_of_conformity(0.2585, 0.001, lower=0.24, upper=0.26),
        atol=5e-7,
    )


def test_students_factor_for_few_degrees(outside):
    # A reading so many u inside a limit conforms with 97.5 % (k for 95 %) and 97.725 % (95.45 %).
    outside(
        "conformance probability at t = 2.570582 and 2.648654, 5 degrees of freedom",
        source="JCGM 100:2008, table G.2",
        standing="from memory",
        expected=[0.975, 0.97725],
        found=[
            probability_of_conformity(-t, 1.0, upper=0.0, degrees=5) for t in (2.570582, 2.648654)
        ],
        atol=1e-6,
    )


def test_parts_per_million_beyond_a_limit(outside):
    outside(
        "parts per million beyond a limit at Cpk 1, 1.33, 1.67",
        source="tables of the normal integral in handbooks of process capability",
        standing="derived",
        expected=[1349.9, 33.04, 0.272],
        found=[
            1e6
            * probability_of_conformity(
                capability(0.0, 1.0, 30, upper=3 * c).index * 3, 1.0, upper=0.0
            )
            for c in (1.0, 1.33, 1.67)
        ],
        rtol=2e-3,
    )


@pytest.mark.parametrize(
    "what, guard, expected",
    [
        ("guarded", 0.02, (0.009878, 0.069027)),
        ("simple", 0.0, (0.018942, 0.037208)),
        ("guard of U", 0.08, (0.000469, 0.247670)),
    ],
)
def test_global_risks_of_the_resistors(outside, what, guard, expected):
    risks = global_risks(
        1500.0,
        0.12,
        0.04,
        lower=1499.8,
        upper=1500.2,
        accept_above=1499.8 + guard,
        accept_below=1500.2 - guard,
    )
    outside(
        f"resistors, {what} acceptance: conforming share, consumer's and producer's risk",
        source=f"{JCGM}, clause 9 example",
        standing="derived",
        expected=(0.904419, *expected),
        found=(risks.conforming, risks.consumer, risks.producer),
        atol=5e-7,
    )


def test_risks_against_the_bivariate_normal(outside):
    true_sd, doubt, upper, accepted_below = 1.0, 0.3, 1.2, 1.0
    joint = stats.multivariate_normal(
        [0.0, 0.0], [[true_sd**2, true_sd**2], [true_sd**2, true_sd**2 + doubt**2]]
    )
    both = joint.cdf([upper, accepted_below])
    risks = global_risks(0.0, true_sd, doubt, upper=upper, accept_below=accepted_below)
    outside(
        "consumer's and producer's risk, one-sided",
        source="scipy.stats.multivariate_normal",
        standing="library",
        expected=[
            stats.norm.cdf(accepted_below, scale=np.hypot(true_sd, doubt)) - both,
            stats.norm.cdf(upper) - both,
        ],
        found=[risks.consumer, risks.producer],
        atol=2e-6,
    )


@pytest.mark.parametrize(
    "reading, expected",
    [
        (4.6, "accept"),
        (4.60001, "undecided"),
        (5.0, "undecided"),
        (5.00001, "undecided"),
        (5.4, "undecided"),
        (5.40001, "reject"),
    ],
)
def test_boundaries_of_the_non_binary_statement(outside, reading, expected):
    found = outcome(reading, relation="<=", bound=5.0, guard=0.4, rule="non-binary")
    outside(
        f"non-binary statement at {reading}, limit 5.0, w = U = 0.4 (1 as expected)",
        source=f"{ILAC}, 4.2",
        standing="from memory",
        expected=1,
        found=int(found == expected),
    )


def test_specific_risk_at_the_acceptance_limit(outside):
    guards = (3.0, 1.5, 1.0, 0.83, 0.0)
    outside(
        "false accept risk at an acceptance limit guarded by 3, 1.5, 1, 0.83, 0 of U = 2u",
        source=f"{ILAC}, table 2",
        standing="derived",
        expected=[9.87e-10, 0.001350, 0.022750, 0.048457, 0.5],
        found=[1.0 - probability_of_conformity(5.0 - r * 0.4, 0.2, upper=5.0) for r in guards],
        atol=5e-7,
    )


def test_counts_against_the_poisson_and_the_binomial(outside):
    bounds = range(12)
    outside(
        "distribution of a count of many improbable defects, mean 2.5",
        source="scipy.stats.poisson",
        standing="library",
        expected=stats.poisson.cdf(bounds, 2.5),
        found=[
            count_probability(DefectCount("hot", "device", 0, 2.5, 2.5**0.5), at_most=n)
            for n in bounds
        ],
        atol=1e-12,
    )
    # The exact limits of a mean when 0, 1, 3, 10 were counted leave 2.5 % in each tail.
    counted, low, high = (0, 1, 3, 10), (0.02532, 0.61867, 4.79539), (3.68888, 5.57164, 8.76727)
    outside(
        "tails of a count at its exact 95 % limits, 0, 1, 3, 10 counted",
        source="exact Poisson limits, tables in handbooks of statistics",
        standing="derived",
        expected=[0.025] * 7,
        found=[
            count_probability(DefectCount("hot", "device", 0, mean, mean**0.5), at_most=n)
            for n, mean in zip(counted, (*high, 18.39036), strict=True)
        ]
        + [
            count_probability(DefectCount("hot", "device", 0, mean, mean**0.5), at_least=n)
            for n, mean in zip(counted[1:], low, strict=True)
        ],
        atol=1e-5,
    )
    bounds = range(30, 71)
    outside(
        "distribution of a count of 100 even chances",
        source="scipy.stats.binom",
        standing="library",
        expected=stats.binom.cdf(bounds, 100, 0.5),
        found=[
            count_probability(DefectCount("hot", "device", 50, 50.0, 5.0), at_most=n)
            for n in bounds
        ],
        atol=1e-3,
    )


@pytest.mark.parametrize("kind, low, high", [("sure", 0.8, 1.0), ("open", 0.0, 1.0)])
def test_counts_against_the_sum_of_unlike_chances(outside, kind, low, high):
    chances = np.random.default_rng(3).uniform(low, high, 60)
    count = DefectCount(
        "hot",
        "device",
        int(np.sum(chances >= 0.5)),
        float(chances.sum()),
        float(np.sqrt(np.sum(chances * (1 - chances)))),
    )
    bounds = range(20, 61)
    outside(
        f"distribution of a count of 60 {kind} pixels, chances {low:g} to {high:g}",
        source="scipy.stats.poisson_binom",
        standing="library",
        expected=stats.poisson_binom.cdf(bounds, chances),
        found=[count_probability(count, at_most=n) for n in bounds],
        atol=0.015,
    )


STATIONS = [
    [[10.1, 10.2], [10.0, 10.3], [10.2, 10.2]],
    [[12.0, 12.1], [12.2, 12.1], [12.1, 12.3]],
    [[9.0, 9.1], [9.1, 8.9], [9.2, 9.1]],
    [[11.4, 11.3], [11.3, 11.5], [11.5, 11.6]],
    [[10.7, 10.8], [10.6, 10.8], [10.9, 10.9]],
]


def test_repeatability_worked_example(outside):
    readings = {
        f"P{part}": {f"S{station}": values for station, values in enumerate(of_part)}
        for part, of_part in enumerate(STATIONS, start=1)
    }
    found = repeatability(readings)
    assert found.pooled
    assert found.categories == 14
    effects = {effect.name: effect for effect in found.effects}
    outside(
        "5 parts on 3 stations twice: sums of squares of part, station, interaction, error",
        source=f"{MSA}; arithmetic",
        standing="derived",
        expected=[33.3, 0.104667, 0.032, 0.165],
        found=[effects[n].sum_of_squares for n in ("device", "bench", "interaction", "error")],
        atol=5e-7,
    )
    outside(
        "F of the interaction and its probability",
        source=f"{MSA}; arithmetic",
        standing="derived",
        expected=[0.363636, 0.92406],
        found=[effects["interaction"].ratio, effects["interaction"].probability],
        atol=5e-6,
    )
    outside(
        "pooled: repeatability, station and part variance, GRR sd, its share [%] and of tolerance",
        source=f"{MSA}; arithmetic",
        standing="derived",
        expected=[0.00856522, 0.00437681, 1.38607246, 0.113763, 9.6181, 17.0645],
        found=[
            found.repeatability**2,
            found.reproducibility**2,
            found.devices**2,
            found.together,
            found.share_of_variation,
            share_of_tolerance(found.together, lower=0.0, upper=4.0),
        ],
        rtol=1e-5,
    )
    kept = repeatability(readings, keep_interaction=True)
    assert kept.categories == 13
    outside(
        "interaction kept: repeatability, station and part variance, GRR share [%]",
        source=f"{MSA}; arithmetic",
        standing="derived",
        expected=[0.011, 0.00483333, 1.38683333, 10.6245],
        found=[
            kept.repeatability**2,
            kept.reproducibility**2,
            kept.devices**2,
            kept.share_of_variation,
        ],
        rtol=1e-5,
    )


def test_capability_worked_by_hand(outside):
    both = capability(10.2, 0.1, 30, lower=9.7, upper=10.5)
    outside(
        "Cp and Cpk of 10.2 with sd 0.1 in 9.7 to 10.5; one-sided Cpk of 5 with sd 0.4 below 6.5",
        source="definition of Cp and Cpk",
        standing="confirmed",
        expected=[1.333333, 1.0, 1.25],
        found=[both.both_sides, both.index, capability(5.0, 0.4, 30, upper=6.5).index],
        atol=5e-7,
    )
    one = capability(0.0, 1.0, 30, upper=1.33 * 3)
    outside(
        "standard error of Cpk 1.33 from 30 devices",
        source="A. F. Bissell, Appl. Stat. 39 (1990) 331",
        standing="derived",
        expected=0.18494,
        found=one.standard_uncertainty,
        atol=5e-6,
    )


YIELDS = [
    (0, 20, (0, 0.168433), (0, 0.161125)),
    (1, 20, (0.001265, 0.248733), (0.008881, 0.236131)),
    (3, 30, (0.021117, 0.265288), (0.034600, 0.256211)),
    (45, 50, (0.781865, 0.966725), (0.786398, 0.956524)),
    (98, 100, (0.929616, 0.997569), (0.929988, 0.994498)),
    (20, 20, (0.831567, 1), (0.838875, 1)),
]


@pytest.mark.parametrize("k, n, exact, score", YIELDS)
def test_binomial_intervals(outside, k, n, exact, score):
    for name, function, method, expected in (
        ("Clopper-Pearson", clopper_pearson, "exact", exact),
        ("Wilson", wilson, "wilson", score),
    ):
        found = function(k, n)
        given = (found.low, found.high)
        outside(
            f"{name} 95 % interval of {k} in {n}",
            source="binomial distribution",
            standing="derived",
            expected=expected,
            found=given,
            atol=5e-7,
        )
        outside(
            f"{name} 95 % interval of {k} in {n}",
            source="scipy.stats.binomtest",
            standing="library",
            expected=tuple(stats.binomtest(k, n).proportion_ci(method=method)),
            found=given,
            atol=1e-10,
        )
    outside(
        f"Wilson 95 % interval of {k} in {n}",
        source="astropy.stats.binom_conf_interval",
        standing="library",
        expected=binom_conf_interval(k, n, confidence_level=0.95, interval="wilson"),
        found=(wilson(k, n).low, wilson(k, n).high),
        atol=1e-10,
    )


def test_one_sided_limit_with_none_found(outside):
    outside(
        "95 % upper limit with 0 in 20, 59, 299",
        source="1 - 0.05^(1/n)",
        standing="derived",
        expected=[0.139108, 0.049508, 0.009969],
        found=[clopper_pearson(0, n, confidence=90.0).high for n in (20, 59, 299)],
        atol=5e-7,
    )


CELLS = {
    0.65: {"F": 0, "J": 1, "K": 2, "L": 3},
    1.0: {"E": 0, "H": 1, "J": 2, "K": 3, "L": 5, "M": 7},
    1.5: {"D": 0, "G": 1, "H": 2, "J": 3, "K": 5, "L": 7},
    2.5: {"C": 0, "F": 1, "G": 2, "H": 3, "J": 5, "K": 7, "L": 10},
}
OF_LETTER = {  # a lot size of the letter, and its sample size
    "C": (20, 5),
    "D": (40, 8),
    "E": (70, 13),
    "F": (120, 20),
    "G": (200, 32),
    "H": (500, 50),
    "J": (1000, 80),
    "K": (2000, 125),
    "L": (10_000, 200),
    "M": (35_000, 315),
}


@pytest.mark.parametrize("quality_limit", CELLS)
def test_cells_of_the_sampling_table(outside, quality_limit):
    cells = CELLS[quality_limit]
    found = [standard_plan(OF_LETTER[letter][0], quality_limit) for letter in cells]
    outside(
        f"sample size and acceptance number, AQL {quality_limit} %, letters {', '.join(cells)}",
        source=f"{ISO}, table 2-A",
        standing="confirmed",
        expected=[(OF_LETTER[letter][1], accept) for letter, accept in cells.items()],
        found=[(plan.size, plan.accept) for plan in found],
    )


def test_arrows_of_the_sampling_table_lead_to_their_own_sample_size(outside):
    outside(
        "arrow cells at AQL 1.0 %: letter F takes E's plan, G takes H's",
        source=f"{ISO}, table 2-A",
        standing="confirmed",
        expected=[(13, 0), (50, 1)],
        found=[(plan.size, plan.accept) for plan in (standard_plan(n, 1.0) for n in (120, 200))],
    )


# Lot sizes at both ends of each code letter, level II, with the letter's sample size.
LETTERS = [
    ("D", 26, 50, 8), ("E", 51, 90, 13), ("F", 91, 150, 20), ("G", 151, 280, 32),
    ("H", 281, 500, 50), ("J", 501, 1200, 80), ("K", 1201, 3200, 125), ("L", 3201, 10_000, 200),
    ("M", 10_001, 35_000, 315),
]  # fmt: skip


def test_code_letters(outside):
    # A quality limit at which the letter's own cell has a plan, so that no arrow is followed.
    own = {letter: quality_limit for quality_limit, cells in CELLS.items() for letter in cells}
    outside(
        "sample size at both ends of the lot sizes of code letters D to M",
        source=f"{ISO}, table 1, level II",
        standing="confirmed",
        expected=[size for *_, size in LETTERS for _ in "ab"],
        found=[
            standard_plan(lot, own[letter]).size
            for letter, first, last, _ in LETTERS
            for lot in (first, last)
        ],
    )


def test_acceptance_probability(outside):
    for (size, accept), expected in {
        (50, 1): (0.910565, 0.643511, 0.279432),
        (80, 2): (0.953447, 0.676691, 0.230621),
        (125, 3): (0.962551, 0.618906, 0.123785),
        (20, 0): (0.817907, 0.602688, 0.358486),
    }.items():
        plan = SamplingPlan(size, accept)
        outside(
            f"acceptance probability of n = {size}, Ac = {accept} at 1, 2.5 and 5 % bad",
            source="binomial distribution",
            standing="derived",
            expected=expected,
            found=[plan.acceptance_probability(p) for p in (0.01, 0.025, 0.05)],
            atol=5e-7,
        )
    outside(
        "the same of a lot of 500 with 5 bad, n = 50, Ac = 1",
        source="hypergeometric distribution",
        standing="derived",
        expected=0.919424,
        found=SamplingPlan(50, 1).acceptance_probability(0.01, lot=500),
        atol=5e-7,
    )
