"""Frames to Reduced in plain numpy, without events or overscan: the stages' tests stand on it."""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from sensorgrade.frames.frame import Frame, Stack
from sensorgrade.frames.geometry import Geometry, Region, geometry
from sensorgrade.masters.master import Master, Masters
from sensorgrade.masters.reduced import (
    TILE,
    FrameLevels,
    NoiseModel,
    PairTiles,
    Reduced,
    StackImage,
    Suspects,
)
from sensorgrade.measure.stage import Inputs
from sensorgrade.measurement import Finding, Measurement
from sensorgrade.recipe.model import Sensor

LAST_CODE = 65535
NO_SUSPECTS = Suspects(
    np.empty(0, np.int32), np.empty(0, np.int32), np.empty((0, 0), np.float32), True
)


def stack_of(kind: str, count: int, **known: Any) -> Stack:
    """A stack of ``count`` frames without files; ``known`` as in Stack, and ``times`` [s]."""
    times = known.pop("times", [None] * count)
    named = "-".join([kind, *(f"{value}" for value in known.values())])
    frames = tuple(
        Frame(
            path=Path(f"{named}-{i}.fits"),
            label=f"{named}-{i}.fits",
            kind=kind,
            planes={},
            time=times[i],
            **known,
        )
        for i in range(count)
    )
    return Stack(kind=kind, frames=frames, **known)


def plain_inputs(
    frames: Sequence[tuple[Stack, np.ndarray]],
    *,
    sensor: Sensor | None = None,
    last_code: float = LAST_CODE,
    clip: float = 5.0,
) -> Inputs:
    """Inputs of the stages from stacks and their frames, arrays of shape (L, M, N) [DN]."""
    sensor = sensor or Sensor(technology="cmos", pixel_pitch=5.0)
    layout = geometry(sensor, {"": frames[0][1].shape[1:]})
    bias = next((_image(s, f, 0.0) for s, f in frames if s.kind == "bias"), None)
    level = 0.0 if bias is None else float(bias.mean.mean())
    images = [_image(s, f, level) for s, f in frames if s.kind in ("dark", "flat") and len(f) > 1]
    reduced = Reduced(
        geometry=layout,
        bias=bias,
        darks=tuple(i for i in images if i.stack.kind == "dark"),
        flats=tuple(i for i in images if i.stack.kind == "flat" and i.frames >= 3),
        pairs=tuple(
            _pair_tiles(s, f, region, last_code, clip)
            for s, f in frames
            if s.kind in ("bias", "flat") and len(f) > 1
            for region in layout.regions
        ),
        noise={region.scope: NoiseModel(25.0, 0.5, level) for region in layout.regions},
        levels=tuple(_levels(s, f, layout) for s, f in frames),
        trails=(),
    )
    return Inputs(sensor, reduced, Masters(_master(bias), None, None), {})


def _image(stack: Stack, frames: np.ndarray, bias: float) -> StackImage:
    frames = np.asarray(frames, np.float64)
    if stack.kind == "flat":
        light = frames.mean(axis=(1, 2)) - bias
        frames = bias + (frames - bias) * (light.mean() / light)[:, None, None]
    ddof = 1 if len(frames) > 1 else 0
    return StackImage(
        stack=stack,
        mean=frames.mean(axis=0).astype(np.float32),
        variance=frames.var(axis=0, ddof=ddof).astype(np.float32),
        count=np.full(frames.shape[1:], len(frames), np.uint16),
        events=0,
        suspects=NO_SUSPECTS,
    )


def _master(image: StackImage | None) -> Master | None:
    if image is None:
        return None
    uncertainty = np.sqrt(image.variance / image.count)
    return Master("bias", image.mean, uncertainty, image.count, "DN", image.stack)


def _levels(stack: Stack, frames: np.ndarray, layout: Geometry) -> FrameLevels:
    mean = np.array([[f[r.rows, r.columns].mean() for r in layout.regions] for f in frames])
    rows: tuple[np.ndarray, ...] = ()
    if stack.kind == "bias":
        rows = tuple(np.asarray(frames, np.float32)[:, r.rows, r.columns] for r in layout.regions)
    sampled = np.array([frames[0][r.rows, r.columns].size for r in layout.regions])
    return FrameLevels(stack, mean, np.full_like(mean, np.nan), sampled, rows)


def _pair_tiles(
    stack: Stack, frames: np.ndarray, region: Region, last_code: float, clip: float
) -> PairTiles:
    names = ("count", "mean_a", "mean_b", "var_a", "var_b", "cov_ab", "right", "down", "saturated")
    pairs, lines = [], []
    for first, second in zip(frames[0::2], frames[1::2], strict=False):
        a = np.asarray(first[region.rows, region.columns], np.float64)
        b = np.asarray(second[region.rows, region.columns], np.float64)
        tiles = [
            [
                _tile(a[y : y + TILE, x : x + TILE], b[y : y + TILE, x : x + TILE], last_code, clip)
                for x in range(0, a.shape[1], TILE)
            ]
            for y in range(0, a.shape[0], TILE)
        ]
        pairs.append(tiles)
        d = a - b
        lines.append((d.mean(axis=1).var(ddof=1), d.mean(axis=0).var(ddof=1)))
    stacked = np.moveaxis(np.array(pairs), -1, 0)
    values = dict(zip(names, stacked, strict=True))
    rows, columns = np.array(lines).T
    return PairTiles(
        stack=stack,
        region=region,
        count=values["count"],
        mean_a=values["mean_a"],
        mean_b=values["mean_b"],
        var_a=values["var_a"],
        var_b=values["var_b"],
        cov_ab=values["cov_ab"],
        cov_right=values["right"],
        cov_down=values["down"],
        saturated=values["saturated"],
        row_variance=rows,
        column_variance=columns,
    )


def _tile(a: np.ndarray, b: np.ndarray, last_code: float, clip: float) -> list[float]:
    saturated = int((a >= last_code).sum() + (b >= last_code).sum())
    d = a - b
    keep = np.abs(d - d.mean()) <= clip * d.std()
    x, y = a[keep], b[keep]
    n = x.size
    e = np.where(keep, d - d[keep].mean(), 0.0)
    right = (e[:, :-1] * e[:, 1:]).sum() / max(e[:, 1:].size, 1)
    down = (e[:-1] * e[1:]).sum() / max(e[1:].size, 1)
    dx, dy = x - x.mean(), y - y.mean()
    over = max(n - 1, 1)
    return [
        n,
        x.mean(),
        y.mean(),
        (dx @ dx) / over,
        (dy @ dy) / over,
        (dx @ dy) / over,
        right,
        down,
        saturated,
    ]


@dataclass(frozen=True, slots=True)
class Given:
    """A stage result that holds measurements taken as known."""

    measurements: tuple[Measurement, ...]
    findings: tuple[Finding, ...] = ()


def knowing(inputs: Inputs, *known: Measurement) -> Inputs:
    """The inputs, with measurements that no stage of the test had to make."""
    return replace(inputs, results={**inputs.results, "given": Given(known)})
