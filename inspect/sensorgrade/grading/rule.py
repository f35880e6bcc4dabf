"""The decision rules: when a reading with its doubt counts as within a limit.

With an upper limit T, a reading y and the guard band w = z(confidence) u:

====================  =================  ==================================  ================
rule                  accept             undecided                           reject
====================  =================  ==================================  ================
simple                y <= T             never                               y > T
guarded acceptance    y <= T - w         never                               y > T - w
guarded rejection     y <= T + w         never                               y > T + w
non-binary            y <= T - w         T - w < y <= T + w, of which        y > T + w
                                         y <= T is accepted on condition
====================  =================  ==================================  ================

A lower limit mirrors the table: a reading on a boundary always takes the better outcome. A count
has no Gaussian guard band: "y <= T - w" reads "P(N <= T) >= confidence", "y > T + w" reads
"P(N <= T) < 1 - confidence", and simple acceptance compares the number found.

References
----------
.. [1] JCGM 106:2012, clause 8 (simple acceptance 8.2, guarded acceptance and rejection 8.3).
.. [2] ILAC-G8:09/2019, 4.2 (binary and non-binary statements with a guard band).
"""

from sensorgrade.defects.defect import DefectCount
from sensorgrade.grading.conformity import count_probability
from sensorgrade.grading.decision import Outcome


def outcome(value: float, *, relation: str, bound: float, guard: float, rule: str) -> Outcome:
    """What ``rule`` makes of a reading.

    ``guard`` is the width w of the guard band, in the unit of ``value`` and ``bound``;
    ``relation`` is ``"<="`` or ``">="``.
    """
    # The acceptance limit is formed first and compared with the reading, as the standards do:
    # a margin (bound - value) would round differently exactly at the boundary.
    inward, outward = (bound - guard, bound + guard)
    if relation == ">=":
        value, inward, outward, bound = -value, -bound - guard, -bound + guard, -bound
    match rule:
        case "simple":
            return "accept" if value <= bound else "reject"
        case "guarded acceptance":
            return "accept" if value <= inward else "reject"
        case "guarded rejection":
            return "accept" if value <= outward else "reject"
    if value <= inward:
        return "accept"
    return "undecided" if value <= outward else "reject"


def count_outcome(
    count: DefectCount, *, relation: str, bound: float, confidence: float, rule: str
) -> Outcome:
    """What ``rule`` makes of a count of defects; ``confidence`` in %."""
    if rule == "simple":
        within = count.found <= bound if relation == "<=" else count.found >= bound
        return "accept" if within else "reject"
    conforms = conformity_of_count(count, relation=relation, bound=bound)
    sure, unsure = confidence / 100.0, 1.0 - confidence / 100.0
    match rule:
        case "guarded acceptance":
            return "accept" if conforms >= sure else "reject"
        case "guarded rejection":
            return "accept" if conforms >= unsure else "reject"
    if conforms >= sure:
        return "accept"
    return "undecided" if conforms >= unsure else "reject"


def conformity_of_count(count: DefectCount, *, relation: str, bound: float) -> float:
    """Probability that the true count meets the limit."""
    if relation == "<=":
        return count_probability(count, at_most=bound)
    return count_probability(count, at_least=bound)
