"""The errors a user can cause, each named for what went wrong.

SensorgradeError
├── RequestError      the request is wrong (recipe, arguments, source): exit status 2
│   └── RecipeError   every mistake found in one recipe, one line each
├── FrameError        a file cannot be used as a frame; the device may still be inspected
├── DeviceError       a device cannot be inspected: exit status 3
└── NotMeasured       a stage lacks frames, or its answer is not resolved; the rest runs

Messages are one sentence: what, where (file, line or key), what was expected, what to do.
All of them pickle, because they cross from worker processes to the parent.
"""


class SensorgradeError(Exception):
    """Anything a user's input can cause; the message is fit to print as it stands."""


class RequestError(SensorgradeError):
    """The request cannot be carried out as written: recipe, arguments or source."""


class RecipeError(RequestError):
    """A recipe with mistakes; ``problems`` holds one complete sentence for each."""

    def __init__(self, problems: tuple[str, ...]) -> None:
        super().__init__(problems)
        self.problems = problems

    def __str__(self) -> str:
        return "\n".join(self.problems)


class FrameError(SensorgradeError):
    """A file cannot be used as a frame; the message names the file and the remedy."""


class DeviceError(SensorgradeError):
    """A device cannot be inspected; the others of the lot go on."""


class NotMeasured(SensorgradeError):
    """A stage lacks frames or its result is not resolved; the message says what is missing."""
