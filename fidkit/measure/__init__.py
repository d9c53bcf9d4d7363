"""Measurements: signal to Dataset, one file per question a bench asks."""

from fidkit.measure.line import QUANTITIES as QUANTITIES
from fidkit.measure.line import measure as measure
from fidkit.measure.line import table as table
