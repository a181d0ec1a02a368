"""Standard uncertainties of the figures, from the classes of the instruments (JCGM 100:2008, GUM).

`classes` says what a tag's class is worth, `rows` moves the tags and finds every stream anew,
`propagate` turns that into figures, and `budget` holds what each tag contributes.
"""

from __future__ import annotations

from monitor.uncertainty.budget import COVERAGE, Budget, Hourly, Uncertainties
from monitor.uncertainty.propagate import propagate

__all__ = ["COVERAGE", "Budget", "Hourly", "Uncertainties", "propagate"]
