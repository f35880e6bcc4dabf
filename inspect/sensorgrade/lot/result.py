"""All that one inspection says of one device, as it goes to result.json and the ledger."""

from dataclasses import dataclass, field

from sensorgrade.defects.candidates import Candidates
from sensorgrade.defects.defect import DefectCount
from sensorgrade.grading.decision import Graded
from sensorgrade.measurement import Finding, Measurement


@dataclass(frozen=True, slots=True)
class InputFile:
    """One raw file that was used: its label below the source, size and digest."""

    label: str
    bytes: int
    sha256: str


@dataclass(frozen=True, slots=True)
class Provenance:
    """What the result was made from; holds nothing that changes between identical runs."""

    recipe: str
    recipe_sha256: str
    inputs: tuple[InputFile, ...]
    versions: dict[str, str]


@dataclass(frozen=True, slots=True)
class DeviceResult:
    """Identity, findings, measurements, counts, grade and provenance of one device.

    ``folder`` is the safe folder name made from ``serial``. ``not_measured`` maps a stage to
    the sentence saying what it lacked. ``taken`` is when the earliest frame was started [s since
    1970, UTC], None when no frame says; it puts a lot in the order of time. ``candidates`` are the
    pixels that other thresholds may call defects; they go to the ledger only, for `regrade`.
    """

    serial: str
    folder: str
    lot: str | None
    wafer: str | None
    die_row: int | None
    die_column: int | None
    findings: tuple[Finding, ...]
    measurements: tuple[Measurement, ...]
    defects: tuple[DefectCount, ...]
    not_measured: dict[str, str]
    graded: Graded
    provenance: Provenance
    taken: float | None = None
    candidates: Candidates | None = field(default=None, compare=False, repr=False)
