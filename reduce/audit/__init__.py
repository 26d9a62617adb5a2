"""Whether the truth bears out what the closures assume.

A finding sets a statistic, with its standard error, against a threshold. Its
verdict compares the confidence interval with the threshold, not the point:
*holds* or *fails* only if the whole interval lies on one side, else
*undecided*, with how many times more truth would settle it. Modules by theme
hold the assumptions, what is measured for each and how.
"""

from __future__ import annotations

from .auditing import SCHEMA, Audit, audit
from .findings import CONFIDENCE, Finding, decide
from .material import Material
from .normality import detrended
from .verdicts import ClosureVerdict

__all__ = [
    "CONFIDENCE",
    "SCHEMA",
    "Audit",
    "ClosureVerdict",
    "Finding",
    "Material",
    "audit",
    "decide",
    "detrended",
]
