"""Charge transfer: retained charge, extended pixel edge, and its exact model by charge balance."""

from dataclasses import replace

import numpy as np
import pytest

from measure.plain_reduction import plain_inputs, stack_of
from sensorgrade.masters.reduced import Trails
from sensorgrade.measure.extended_pixel_edge import ChargeTransferOptions, charge_transfer
from sensorgrade.recipe.model import OutputOptions, Section, Sensor
from sensorgrade.simulate.shift import deferred

EDGE = "J. R. Janesick et al., Opt. Eng. 26 (1987) 692"
BALANCE = "charge balance of a flat block"
COLUMNS = 2048


def transfer(signal, overscan, *, pixels=None):
    """The stage's inefficiency for one serial edge after 2048 transfers."""
    sensor = Sensor(
        technology="ccd",
        pixel_pitch=15.0,
        outputs={
            "": OutputOptions(
                image=Section(0, 4, 0, COLUMNS),
                overscan=Section(0, 4, COLUMNS, COLUMNS + len(overscan)),
            )
        },
    )
    frames = np.full((2, 4, COLUMNS + len(overscan)), 100.0)
    given = plain_inputs([(stack_of("bias", 2), frames)], sensor=sensor)
    profile = np.concatenate([np.full(8, signal), overscan])
    edge = Trails(
        stack_of("flat", 2, exposure=1.0),
        "",
        8,
        profile,
        np.full(len(profile), 0.1),
        np.empty(0),
        np.empty(0),
    )
    given = replace(given, reduced=replace(given.reduced, trails=(edge,)))
    return charge_transfer(given, ChargeTransferOptions(pixels=pixels)).measurements[0].value


@pytest.mark.parametrize(
    "signal, trail, pixels, expected",
    [
        (50000.0, [5, 2, 1], None, 7.8125e-8),
        (50000.0, [5, 2, 1], 1, 4.882813e-8),
        (1000.0, [7, 2, 1], None, 4.882813e-6),
    ],
)
def test_extended_pixel_edge_worked_numbers(outside, signal, trail, pixels, expected):
    counted = "all deferred charge" if pixels is None else "first overscan pixel"
    outside(
        f"CTI of {signal:g} electron, trail {trail}, 2048 transfers, {counted}",
        source=EDGE,
        standing="derived",
        expected=expected,
        found=transfer(signal, np.array([*trail, 0, 0, 0, 0, 0], float), pixels=pixels),
        rtol=1e-6,
    )


@pytest.mark.parametrize(
    "inefficiency, first, second, by_sum, by_first",
    [
        (1e-6, 0.00204590, 2.0953e-6, 1.000001, 0.99898),
        (1e-5, 0.0202716, 2.06974e-4, 1.000010, 0.98983),
        (1e-4, 0.1851796, 0.0183248, 1.000100, 0.90429),
    ],
)
def test_a_flat_block_after_2048_transfers(outside, inefficiency, first, second, by_sum, by_first):
    block = np.zeros((1, COLUMNS + 20), np.float32)
    block[:, :COLUMNS] = 1e5
    arrived = deferred(block, inefficiency, axis=1)[0].astype(float)
    last, overscan = arrived[COLUMNS - 1], arrived[COLUMNS:]
    where = f"CTI {inefficiency:g}, 2048 transfers"
    outside(
        f"first and second overscan pixel over signal, {where}",
        source=BALANCE,
        standing="derived",
        expected=[first, second],
        found=overscan[:2] / 1e5,
        rtol=3e-5,
    )
    outside(
        f"CTI found from all deferred charge over the true one, {where}",
        source=BALANCE,
        standing="derived",
        expected=by_sum,
        found=transfer(last, overscan) / inefficiency,
        atol=2e-6,
    )
    outside(
        f"CTI found from the first overscan pixel over the true one, {where}",
        source=BALANCE,
        standing="derived",
        expected=by_first,
        found=transfer(last, overscan, pixels=1) / inefficiency,
        atol=1e-5,
    )


@pytest.mark.parametrize(
    "efficiency, expected",
    [
        (0.9999, [0.904833, 0.818723, 0.814802, 0.663902]),
        (0.99999, [0.990050, 0.980199, 0.979728, 0.959867]),
        (0.999995, [0.995012, 0.990050, 0.989812, 0.979728]),
        (0.999999, [0.999001, 0.998002, 0.997954, 0.995912]),
    ],
)
def test_charge_that_a_lone_packet_keeps(outside, efficiency, expected):
    transfers = (1000, 2000, 2048, 4096)
    found = []
    for n in transfers:
        packets = np.zeros((1, n), np.float32)
        packets[0, n - 1] = 1e5
        found.append(deferred(packets, 1 - efficiency, axis=1)[0, n - 1] / 1e5)
    outside(
        f"share kept after 1000, 2000, 2048, 4096 transfers of efficiency {efficiency}",
        source="efficiency to the power of the transfers",
        standing="derived",
        expected=expected,
        found=found,
        atol=7e-7,
    )


def test_an_x_ray_after_2000_transfers(outside):
    packets = np.zeros((1, 2000), np.float32)
    packets[0, -1] = 1616.0
    outside(
        "charge of a 1616 electron event after 2000 transfers of CTI 3e-6",
        source="S0 (1 - CTI)^n",
        standing="derived",
        expected=1606.3330,
        found=float(deferred(packets, 3e-6, axis=1)[0, -1]),
        atol=1e-4,
    )
