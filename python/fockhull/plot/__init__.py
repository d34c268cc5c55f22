"""Pictures of exclusion polytopes, of points in them, and of sweeps.

Every function draws into ``ax`` (a new figure without it) and returns it, so that titles, limits
and scales stay the caller's. Line styles, markers and hatches tell things apart, not colours
alone. No setting of matplotlib is changed. Needs matplotlib; domains in three dimensions SciPy.
"""

from fockhull.plot.bars import occupation_bars, slack_bars
from fockhull.plot.constraints import occupations, slack
from fockhull.plot.domains import domain
from fockhull.plot.spectra import gap, spectrum

__all__ = [
    "domain",
    "gap",
    "occupation_bars",
    "occupations",
    "slack",
    "slack_bars",
    "spectrum",
]
