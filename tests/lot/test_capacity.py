import pytest

from lot.fakes import fake_devices
from sensorgrade.errors import RequestError
from sensorgrade.frames.frame import DeviceFrames, Frame, Plane, Stack
from sensorgrade.lot.capacity import PROCESS, capacity, device_memory, free_memory


def device(rows: int, frames: int, tmp_path) -> DeviceFrames:
    path = tmp_path / "frame.raw"
    frame = Frame(path, "frame.raw", "bias", {"": Plane((rows, rows), "uint16", path)})
    return DeviceFrames("S1", "S1", (Stack("bias", (frame,) * frames),))


@pytest.mark.parametrize(
    ("devices", "jobs", "cores", "expected"),
    [
        (24, None, 8, (8, 1)),
        (3, None, 8, (3, 2)),
        (1, None, 8, (1, 8)),
        (24, 2, 8, (2, 4)),
        (24, 16, 8, (16, 1)),
        (24, 3, 8, (3, 2)),
        (0, None, 8, (1, 8)),
    ],
)
def test_devices_times_cores_never_exceed_the_machine(tmp_path, devices, jobs, cores, expected):
    found = capacity(
        fake_devices(tmp_path, *["well"] * devices), jobs=jobs, memory=1e12, cores=cores
    )
    assert (found.jobs, found.threads) == expected


def test_the_memory_budget_limits_the_devices_at_work(tmp_path):
    devices = fake_devices(tmp_path, *["well"] * 9)
    assert capacity(devices, jobs=8, memory=3.5 * PROCESS, cores=8).jobs == 3
    assert capacity(devices, jobs=8, memory=0.5 * PROCESS, cores=8).jobs == 1


def test_the_need_grows_with_the_pixels_and_not_with_the_frames(tmp_path):
    small, large = device(100, 10, tmp_path), device(200, 10, tmp_path)
    assert device_memory(large) - PROCESS == 4 * (device_memory(small) - PROCESS)
    assert device_memory(device(100, 500, tmp_path)) == device_memory(small)


def test_the_free_memory_is_that_of_the_machine():
    assert 1e8 < free_memory() < 1e14


@pytest.mark.parametrize("wrong", [{"jobs": 0, "memory": None}, {"jobs": None, "memory": 0.0}])
def test_no_jobs_or_no_memory_is_refused(wrong):
    with pytest.raises(RequestError, match="expected"):
        capacity([], **wrong)
