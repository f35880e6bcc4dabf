"""A device's candidate pixels as one row of the ledger, and back."""

import json
import sqlite3
import zlib
from functools import cache

import numpy as np
from numpy.typing import NDArray

from sensorgrade.defects.candidates import CANDIDATE, REACH, SETTLED, Candidates, Layout
from sensorgrade.errors import RequestError
from sensorgrade.recipe.model import Section

FORMS = (CANDIDATE, REACH, SETTLED)


def insert_candidates(connection: sqlite3.Connection, device: int, kept: Candidates) -> None:
    """Keep a device's candidates: about ten bytes for each pixel."""
    connection.execute(
        "INSERT INTO candidates VALUES (?, ?, ?)", (device, _text(kept.layout), _packed(kept))
    )


def select_candidates(connection: sqlite3.Connection) -> dict[int, Candidates]:
    """The candidates of every device that has any, by its number in the ledger.

    Raises
    ------
    RequestError
        A row is damaged.
    """
    found = {}
    for device, layout, arrays in connection.execute("SELECT * FROM candidates"):
        try:
            found[device] = _unpacked(layout, arrays)
        except (ValueError, KeyError, zlib.error) as error:
            raise RequestError(
                f"the ledger's row {device} of candidates is damaged ({error}); thresholds on"
                " pixels cannot move, inspect that device again"
            ) from error
    return found


def _packed(kept: Candidates) -> bytes:
    """Column by column, because bytes that are alike lie together and shrink."""
    arrays = (kept.pixels, kept.reaches, kept.settled)
    parts = [np.array([len(one) for one in arrays], "<u4").tobytes()]
    for array, form in zip(arrays, FORMS, strict=True):
        parts += [array[name].tobytes() for name in form.names or ()]
    return zlib.compress(b"".join(parts))


def _unpacked(layout: str, packed: bytes) -> Candidates:
    content = zlib.decompress(packed)
    sizes = np.frombuffer(content, "<u4", len(FORMS)).tolist()
    at = 4 * len(FORMS)
    arrays: list[NDArray[np.void]] = []
    for size, form in zip(sizes, FORMS, strict=True):
        array = np.empty(size, form)
        for name in form.names or ():
            column = np.frombuffer(content, form[name], size, at)
            array[name] = column
            at += column.nbytes
        arrays.append(array)
    return Candidates(_layout(layout), *arrays)


def _text(layout: Layout) -> str:
    return json.dumps(
        {
            "shape": layout.shape,
            "outputs": [
                [name, place.row_start, place.row_stop, place.column_start, place.column_stop]
                for name, place in layout.outputs
            ],
            "regions": layout.regions,
        },
        ensure_ascii=False,
    )


@cache
def _layout(text: str) -> Layout:
    """The devices of a lot have the same one."""
    document = json.loads(text)
    rows, columns = document["shape"]
    return Layout(
        (rows, columns),
        tuple((name, Section(*place)) for name, *place in document["outputs"]),
        tuple(document["regions"]),
    )
