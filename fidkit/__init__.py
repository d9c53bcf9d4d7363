"""fidkit: from a raw free induction decay to the numbers of the coil and the field.

Three lines do the job::

    import fidkit as fk
    fid = fk.read("loop.dx")
    print(fk.table(fk.measure(fid)))
"""

from typing import TYPE_CHECKING, Any

from fidkit import steps as steps
from fidkit.chain import Call as Call
from fidkit.chain import Chain as Chain
from fidkit.chain import chain_of as chain_of
from fidkit.formats import from_universal as from_universal
from fidkit.formats import read as read
from fidkit.formats import write as write
from fidkit.measure import measure as measure
from fidkit.measure import table as table
from fidkit.nuclei import NUCLEI as NUCLEI
from fidkit.nuclei import field_from_frequency as field_from_frequency
from fidkit.nuclei import larmor_frequency as larmor_frequency
from fidkit.params import STEPS as STEPS
from fidkit.params import FidkitError as FidkitError
from fidkit.signals import from_array as from_array
from fidkit.signals import spectrum_from_array as spectrum_from_array
from fidkit.version import __version__ as __version__

if TYPE_CHECKING:  # the steps again, for editors and type checkers; at run time see below
    from fidkit.steps.apodization import *
    from fidkit.steps.baseline import *
    from fidkit.steps.combining import *
    from fidkit.steps.conditioning import *
    from fidkit.steps.phase import *
    from fidkit.steps.transform import *


def __getattr__(name: str) -> Any:
    """Every registered step is an attribute, without a second list of names."""
    if name in STEPS:
        return STEPS[name].function
    raise AttributeError(f"module 'fidkit' has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted({*globals(), *STEPS})
