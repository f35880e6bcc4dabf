"""Spatial parts against variances put in, sampling theory and numpy's own statistics."""

import numpy as np

from measure.plain_reduction import NO_SUSPECTS, stack_of
from sensorgrade.frames.geometry import Region
from sensorgrade.masters.reduced import StackImage
from sensorgrade.measure.spatial_noise import SpatialNoise, spatial_noise

EMVA = "EMVA Standard 1288, release 4.0 Linear"


def parts(image: np.ndarray, temporal: np.ndarray, frames: int, **known) -> SpatialNoise:
    stack = StackImage(
        stack=stack_of("dark", frames),
        mean=image.astype(np.float32),
        variance=temporal.astype(np.float32),
        count=np.full(image.shape, frames, np.uint16),
        events=0,
        suspects=NO_SUSPECTS,
    )
    region = Region("device", "", None, slice(0, image.shape[0]), slice(0, image.shape[1]))
    return spatial_noise(stack, None, region, relative=known.get("relative", False))


def test_row_column_and_pixel_variances_come_back(outside):
    # Row sd 1, column sd 2, pixel sd 3, temporal sd 4 over 16 frames, 60 x 80 pixels.
    found = []
    for seed in range(400):
        rng = np.random.default_rng([6, seed])
        image = 1000 + rng.normal(0, 3, (60, 80)) + rng.normal(0, 1, (60, 80))
        image += rng.normal(0, 1, (60, 1)) + rng.normal(0, 2, (1, 80))
        temporal = 16 * rng.chisquare(15, (60, 80)) / 15
        noise = parts(image, temporal, 16)
        found.append([p.variance for p in (noise.row, noise.column, noise.pixel)])
    scatter = np.array(
        [np.sqrt(2 / 53) * (1 + 10 / 80), np.sqrt(2 / 73) * (4 + 10 / 60), 10 * np.sqrt(2 / 4661)]
    )
    for part, expected, error, values in zip(
        ("row", "column", "pixel"), (1.0, 4.0, 9.0), scatter, np.transpose(found), strict=True
    ):
        outside(
            f"mean {part} variance of 400 images",
            source=f"{EMVA}, row, column and pixel parts",
            standing="from memory",
            expected=expected,
            found=values.mean(),
            atol=5 * error / 20,
        )
    outside(
        "scatter of row, column and pixel variances over images",
        source="sampling theory of the analysis of variance",
        standing="derived",
        expected=scatter,
        found=np.std(found, axis=0, ddof=1),
        rtol=5 / np.sqrt(2 * 399),
    )


def test_uncertainty_of_a_pixel_variance(outside):
    rng = np.random.default_rng(11)
    image = 100 + rng.normal(0, np.hypot(2, 5 / 4), (1000, 1000))
    noise = parts(image, np.full((1000, 1000), 25.0), 16)
    outside(
        "standard error of a DSNU variance, s = 2, sigma = 5, 16 frames, 1e6 pixels",
        source="sampling theory, Cramér-Rao",
        standing="derived",
        expected=0.00789,
        found=noise.pixel.standard_error,
        rtol=0.01,
    )


def test_temporal_noise_is_taken_out(outside):
    # Spatial 6.5 DN² measured, temporal 40 DN², 16 frames: 4 DN², 4 electron at 0.5 DN/e-.
    rng = np.random.default_rng(12)
    pattern = rng.normal(0, 1, (96, 96))
    plain = parts(100 + pattern, np.zeros((96, 96)), 16)
    image = 100 + pattern * np.sqrt(6.5 / plain.pixel.variance)
    noise = parts(image, np.full((96, 96), 40.0), 16)
    outside(
        "DSNU after the temporal variance of 16 frames is taken out [electron]",
        source=f"{EMVA}, DSNU, worked example",
        standing="from memory",
        expected=4.0,
        found=2 * np.sqrt(noise.pixel.variance),
        rtol=1e-4,  # the image is kept in single precision
    )


def test_smooth_shading_is_found_and_kept_apart(outside):
    rows, columns = np.mgrid[-1:1:200j, -1:1:300j]
    lamp = np.cos(np.arctan(0.4 * np.hypot(rows, columns))) ** 4
    rng = np.random.default_rng(13)
    image = 10000 * lamp * (1 + 0.005 * rng.standard_normal(lamp.shape))
    noise = parts(image, np.zeros(lamp.shape), 16, relative=True)
    outside(
        "shading of a cos⁴ field, standard deviation over mean [%]",
        source="numpy on the field without noise",
        standing="library",
        expected=100 * lamp.std() / lamp.mean(),
        found=100 * np.sqrt(noise.shading.variance),
        rtol=0.01,
    )
    outside(
        "PRNU beside a cos⁴ field [%]",
        source="0.5 % put in",
        standing="derived",
        expected=0.5,
        found=100 * np.sqrt(noise.pixel.variance),
        rtol=5 / np.sqrt(2 * lamp.size) + 0.002,
    )
