"""Single X-rays in frames that most pixels of are empty in: where charge stands out, and around."""

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import maximum_filter

from sensorgrade.frames.geometry import Geometry, Output
from sensorgrade.masters.reduced import NoiseModel, StackImage, XRayEvents
from sensorgrade.masters.source import OpenStack, read_rows
from sensorgrade.masters.survey import used_overscan

THRESHOLD = 8.0  # deviations of the noise past which a pixel is the top of an event


def x_ray_events(
    sources: dict[str, OpenStack],
    geometry: Geometry,
    bias: StackImage | None,
    noise: dict[str, NoiseModel],
) -> list[XRayEvents]:
    """Events of one stack of X-ray frames, output by output; frames are read one at a time.

    An event is a pixel higher than its eight neighbours and past `THRESHOLD` deviations of read
    noise. Of every sample the overscan of its row, the bias frames' mean and the frame's median
    are taken off, so that dark charge is not counted.
    """
    found: dict[str, list[tuple[int, NDArray[np.intp], NDArray[np.float32]]]] = {}
    noises = {
        region.output: float(np.sqrt(noise[region.scope].read)) for region in geometry.regions
    }
    stack = next(iter(sources.values())).stack
    for key, source in sources.items():
        for number in range(len(stack.frames)):
            raw = read_rows(_one_frame(source, number), np.arange(source.planes[0].shape[0]))[0]
            for output in geometry.outputs:
                if output.extension == key:
                    image = _image(raw, output, bias)
                    places, islands = _islands(image, THRESHOLD * noises[output.name])
                    found.setdefault(output.name, []).append((number, places, islands))
    return [
        _joined(sources, output, found[output.name], noises[output.name])
        for output in geometry.outputs
    ]


def _one_frame(source: OpenStack, number: int) -> OpenStack:
    """The same source for one of its frames."""
    at = slice(number, number + 1)
    return replace(
        source,
        stack=replace(source.stack, frames=source.stack.frames[at]),
        planes=source.planes[at],
        descriptors=source.descriptors[at],
        swap=source.swap[at],
        flip=source.flip[at],
    )


def _image(
    raw: NDArray[np.uint16] | NDArray[np.float32], output: Output, bias: StackImage | None
) -> NDArray[np.float32]:
    """The output's signal [DN], the pixel read first at row 0, column 0."""
    image = raw[output.image.slices].astype(np.float32)
    overscan = used_overscan(output)
    if overscan is not None:
        rows = raw[output.image.slices[0], overscan.column_start : overscan.column_stop]
        image -= rows.mean(axis=1, dtype=np.float64).astype(np.float32)[:, None]
    if bias is not None:
        image -= bias.mean[output.place.slices]
    image -= np.float32(np.median(image))
    rows_step = -1 if output.corner.startswith("top") else 1
    columns_step = -1 if output.corner.endswith("right") else 1
    return image[::rows_step, ::columns_step]


def _islands(
    image: NDArray[np.float32], threshold: float
) -> tuple[NDArray[np.intp], NDArray[np.float32]]:
    """Places (E, 2) of the events' tops off the border, and the 3 x 3 samples about them."""
    top = (image > threshold) & (image == maximum_filter(image, size=3, mode="nearest"))
    top[[0, -1], :] = False
    top[:, [0, -1]] = False
    places = np.argwhere(top)
    step = np.arange(-1, 2)
    islands = image[
        places[:, 0, None, None] + step[:, None], places[:, 1, None, None] + step[None, :]
    ]
    return places, islands


def _joined(
    sources: dict[str, OpenStack],
    output: Output,
    found: list[tuple[int, NDArray[np.intp], NDArray[np.float32]]],
    noise: float,
) -> XRayEvents:
    return XRayEvents(
        stack=sources[output.extension].stack,
        output=output.name,
        frame=np.concatenate([np.full(len(p), number, np.int32) for number, p, _ in found]),
        rows=np.concatenate([p[:, 0] for _, p, _ in found]).astype(np.int32),
        columns=np.concatenate([p[:, 1] for _, p, _ in found]).astype(np.int32),
        islands=np.concatenate([islands for _, _, islands in found]),
        noise=noise,
    )
