"""The page of a lot: a single HTML file that needs nothing but a browser."""

from collections.abc import Sequence

from sensorgrade.lot.failure import Failure
from sensorgrade.lot.result import DeviceResult
from sensorgrade.recipe.model import Recipe
from sensorgrade.report.lot_data import lot_data
from sensorgrade.report.page import rendered


def lot_page(
    results: Sequence[DeviceResult], *, failures: Sequence[Failure], recipe: Recipe, name: str
) -> str:
    """HTML text of a lot's page: yield, reasons, what-if, wafers, distributions, drift, devices.

    Parameters
    ----------
    results : sequence of DeviceResult
        Devices that were inspected; the page links to device.html in each one's folder beside it.
    failures : sequence of Failure
        Devices that could not be inspected.
    recipe : Recipe
        Its grades are those that reasons are ranked for and whose limits can be moved.
    name : str
        What the lot is called on the page.

    Returns
    -------
    str
        The same text for the same results. It loads nothing, and its content security policy
        lets no script run but its own. Every text from outside is escaped.
    """
    return rendered("lot.html", lot_data(results, failures=failures, recipe=recipe, name=name))
