"""Grades image sensors from raw bench frames.

>>> import sensorgrade
>>> recipe = sensorgrade.load_recipe("demo")
>>> recipe.sensor.technology
'ccd'

`sensorgrade guide python-interface` is a worked example. Names are imported when first used.
"""

import lazy_loader

__version__ = "0.1.0"

__getattr__, __dir__, __all__ = lazy_loader.attach_stub(__name__, __file__)
