"""Plots of pocket pumping: how long traps hold their electrons, and how deep they lie."""

import numpy as np

from sensorgrade.measure.pocket_pumping import PocketPumpingResult
from sensorgrade.report.plot import Axis, Mark, Plot, Series
from sensorgrade.silicon import SPECIES

BINS = 30
HEADROOM = 1.2  # of the histogram below the labels of the species


def pocket_pumping_plots(result: PocketPumpingResult) -> tuple[Plot, ...]:
    """Histograms of emission times, temperature by temperature, and of energies."""
    found: dict[float, list[float]] = {}
    for trap in result.traps:
        for emission in trap.emissions:
            found.setdefault(round(emission.temperature, 1), []).append(emission.tau)
    plots = []
    if found:
        every = [tau for taus in found.values() for tau in taus]
        edges = np.geomspace(0.8 * min(every), 1.25 * max(every), BINS + 1)
        resolved = sum(bool(trap.emissions) for trap in result.traps)
        plots.append(
            Plot(
                key="trap-times",
                title="Emission times of traps",
                caption=f"{resolved} of {len(result.traps)} traps were seen at three or more dwell"
                " times of a temperature. A species makes a peak that moves to shorter times as"
                " the sensor gets warmer.",
                alt=f"Histogram of the emission times of {resolved} traps at"
                f" {len(found)} temperatures.",
                x=Axis(label="emission time [s]", log=True),
                y=Axis(label="traps", low=0.0),
                series=tuple(
                    Series(
                        label=f"{kelvin:g} K",
                        x=edges,
                        y=np.histogram(taus, edges)[0],
                        draw="steps",
                        colour=colour,
                    )
                    for colour, (kelvin, taus) in enumerate(sorted(found.items()))
                ),
            )
        )
    energies = [trap.energy.energy for trap in result.traps if trap.energy is not None]
    if energies:
        edges = np.linspace(min(energies) - 0.01, max(energies) + 0.01, BINS + 1)
        counts = np.histogram(energies, edges)[0]
        plots.append(
            Plot(
                key="trap-energies",
                title="Energies of traps",
                caption=f"{len(energies)} traps with emission times at two or more temperatures."
                " Known species are marked where their energies lie; a trap near a mark is a"
                " candidate, no more.",
                alt=f"Histogram of the energies of {len(energies)} traps below the conduction"
                " band.",
                x=Axis(label="energy below the conduction band [eV]"),
                y=Axis(label="traps", low=0.0, high=HEADROOM * float(counts.max())),
                series=(Series(label="traps", x=edges, y=counts, draw="steps"),),
                marks=tuple(
                    Mark(label=species.name, x=species.energy)
                    for species in SPECIES
                    if edges[0] < species.energy < edges[-1]
                ),
            )
        )
    return tuple(plots)
