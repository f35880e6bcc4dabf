"""The page of one device: a single HTML file that needs nothing but a browser."""

from collections.abc import Mapping

from sensorgrade.defects.defect import Defects
from sensorgrade.lot.result import DeviceResult
from sensorgrade.masters.master import Masters
from sensorgrade.measure.stage import StageResult
from sensorgrade.recipe.model import Recipe
from sensorgrade.report.device_data import device_data
from sensorgrade.report.page import rendered


def device_page(
    result: DeviceResult,
    *,
    masters: Masters,
    defects: Defects,
    stages: Mapping[str, StageResult],
    recipe: Recipe,
) -> str:
    """HTML text of the device's page: grade, limits, pictures, defects, plots, provenance.

    Parameters
    ----------
    result : DeviceResult
        What result.json holds; the page states nothing else about the device.
    masters : Masters
        Shown whole up to 768 x 768 pixels; above, as block means with full-resolution tiles
        around the weightiest defects.
    defects : Defects
    stages : mapping
        Results of the stages that ran, by name; those with curves are plotted.
    recipe : Recipe

    Returns
    -------
    str
        The same text for the same arguments. It loads nothing, and its content security policy
        lets no script run but its own. Every text from outside is escaped.
    """
    page = device_data(result, masters=masters, defects=defects, stages=stages, recipe=recipe)
    return rendered("device.html", page)
