"""Steps: signal to signal, one file per stage of the work.

Every module in this folder is imported, so that a new step needs no second place.
"""

import importlib
import pkgutil

for _module in pkgutil.iter_modules(__path__):
    importlib.import_module(f"{__name__}.{_module.name}")
