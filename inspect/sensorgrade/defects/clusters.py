"""Groups of defective pixels that touch."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components
from scipy.spatial import cKDTree

from sensorgrade.defects.stage import POINT, CountName, DefectStage, Found
from sensorgrade.measure.stage import Inputs
from sensorgrade.options import number


@dataclass(frozen=True, slots=True, kw_only=True)
class ClusterOptions:
    """Recipe keys under ``stages: clusters``."""

    distance: int = number(
        "Pixels are of one cluster when no farther apart, in rows and in columns, than this",
        default=1,
        minimum=1,
    )
    smallest: int = number("Pixels of the smallest cluster", default=3, minimum=2)


COUNTS = (CountName("clusters", ("cluster",), "Groups of defective pixels that touch"),)


def clusters(inputs: Inputs, options: ClusterOptions) -> Found:
    """Nothing of its own: clusters are made of what the other finders found; see `groups`."""
    return Found(points=np.empty(0, POINT), lines=(), lacking={})


STAGE = DefectStage("clusters", ClusterOptions, clusters, COUNTS)


def cluster_numbers(
    rows: NDArray[np.integer], columns: NDArray[np.integer], options: ClusterOptions
) -> NDArray[np.int64]:
    """The number of the cluster that each pixel is in, counted from 0; -1 in none.

    With ``distance`` 1 pixels that touch by a side or a corner belong together (8-connected).
    """
    if len(rows) < options.smallest:
        return np.full(len(rows), -1)
    places = np.column_stack([rows, columns])
    near = cKDTree(places).query_pairs(options.distance + 0.5, p=np.inf, output_type="ndarray")
    link = coo_matrix((np.ones(len(near)), near.T), shape=(len(rows), len(rows)))
    _, label = connected_components(link, directed=False)
    large = np.bincount(label) >= options.smallest
    number = np.where(large, np.cumsum(large) - 1, -1)
    found: NDArray[np.int64] = number[label]
    return found


def groups(
    rows: NDArray[np.int32], columns: NDArray[np.int32], options: ClusterOptions
) -> list[NDArray[np.int64]]:
    """Indices of the pixels of each cluster, as `cluster_numbers` tells them."""
    number = cluster_numbers(rows, columns, options)
    order = np.argsort(number, kind="stable")
    starts = np.searchsorted(number[order], np.arange(number.max(initial=-1) + 1))
    return np.split(order, starts)[1:]
