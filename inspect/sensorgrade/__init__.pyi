from .api import device_from_frames, load_recipe
from .defects.bits import BITS, Bit
from .defects.defect import DefectCount, Defects
from .defects.mask_file import read_mask
from .errors import (
    DeviceError,
    FrameError,
    NotMeasured,
    RecipeError,
    RequestError,
    SensorgradeError,
)
from .frames.arrays import frame_from_array
from .frames.frame import DeviceFrames, Frame, Stack
from .frames.inventory import find_devices
from .grading.decision import Graded, LimitResult
from .inspection import Inspection, inspect_device, write_inspection
from .lot.result import DeviceResult
from .masters.master import Master, Masters
from .measure.stage import Inputs, Quantity, Stage
from .measurement import Finding, Measurement
from .recipe.model import Recipe

__version__: str

__all__ = [
    "BITS",
    "Bit",
    "DefectCount",
    "Defects",
    "DeviceError",
    "DeviceFrames",
    "DeviceResult",
    "Finding",
    "Frame",
    "FrameError",
    "Graded",
    "Inputs",
    "Inspection",
    "LimitResult",
    "Master",
    "Masters",
    "Measurement",
    "NotMeasured",
    "Quantity",
    "Recipe",
    "RecipeError",
    "RequestError",
    "SensorgradeError",
    "Stack",
    "Stage",
    "device_from_frames",
    "find_devices",
    "frame_from_array",
    "inspect_device",
    "load_recipe",
    "read_mask",
    "write_inspection",
]
