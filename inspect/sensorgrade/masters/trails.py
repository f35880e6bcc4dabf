"""Edge profiles: what flats leave of their charge in the overscan, and biases without any."""

import numpy as np
from numpy.typing import NDArray

from sensorgrade.frames.frame import Stack
from sensorgrade.frames.geometry import Output
from sensorgrade.masters.reduced import Trails
from sensorgrade.masters.source import OpenStack, read_rows

EDGE = 8  # image columns or rows before the edge that are kept


def edge_columns(output: Output) -> NDArray[np.int64]:
    """Raw columns across the serial edge in readout order: last image ones, then overscan."""
    section = output.overscan
    if section is None:
        return np.empty(0, np.int64)
    image = np.arange(output.image.column_start, output.image.column_stop)
    overscan = np.arange(section.column_start, section.column_stop)
    if "right" in output.corner:
        image, overscan = image[::-1], overscan[::-1]
    return np.concatenate([image[-EDGE:], overscan])


def edge_rows(output: Output) -> NDArray[np.int64]:
    """Raw rows across the parallel edge in readout order; empty without parallel overscan."""
    section = output.parallel_overscan
    if section is None:
        return np.empty(0, np.int64)
    image = np.arange(output.image.row_start, output.image.row_stop)
    overscan = np.arange(section.row_start, section.row_stop)
    if "top" in output.corner:
        image, overscan = image[::-1], overscan[::-1]
    return np.concatenate([image[-EDGE:], overscan])


def edge_trails(
    stack: Stack, output: Output, profile: NDArray[np.float32], sources: dict[str, OpenStack]
) -> Trails:
    """Mean edge profiles of one bias or flat stack and output.

    profile : (M, K) float32 [DN], the columns of `edge_columns` for each row, mean over frames
    """
    serial = serial_error = parallel = parallel_error = np.empty(0)
    if profile.size:
        serial, serial_error = _mean_profile(profile)
    rows = edge_rows(output)
    if len(rows):
        samples = read_rows(sources[output.extension], rows)
        across = samples[:, :, output.image.column_start : output.image.column_stop]
        parallel, parallel_error = _mean_profile(across.mean(axis=0, dtype=np.float64).T)
    return Trails(
        stack=stack,
        output=output.name,
        image_pixels=EDGE,
        serial=serial,
        serial_uncertainty=serial_error,
        parallel=parallel,
        parallel_uncertainty=parallel_error,
    )


def _mean_profile(
    profiles: NDArray[np.floating],
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Mean over lines (axis 0) and its standard error, less the far half of the overscan.

    Lines whose overscan holds a particle's charge are left out: past 5 robust deviations.
    """
    overscan = profiles.shape[1] - EDGE
    far = profiles[:, profiles.shape[1] - overscan // 2 :]
    base = far.mean(axis=1, dtype=np.float64)
    level = profiles - base[:, None]
    trail = level[:, EDGE:].sum(axis=1)
    centre = np.median(trail)
    spread = 1.4826 * np.median(np.abs(trail - centre))
    kept = level[np.abs(trail - centre) <= 5 * max(float(spread), 1e-9)]
    error = kept.std(axis=0, ddof=1) / np.sqrt(len(kept)) if len(kept) > 1 else np.zeros_like(base)
    mean: NDArray[np.float64] = kept.mean(axis=0)
    return mean, error
