"""From which run on the parameters in force no longer fit.

A robust fit of a window stays with the majority and takes the runs after a change for outliers, the surer the larger
the change. So the outliers from the calibration in force are watched: a one-sided cumulative sum over whether each
run is one, for a share of 2 % before against 60 % after (Page 1954), the excursion that still stands at the end of
the window. Three outliers with at most two good runs among them are enough; a single slip never is.

References
----------
.. [1] Page: Continuous inspection schemes. Biometrika 41 (1954) 100-115.
"""

from __future__ import annotations

import numpy as np

from registry.numerics.arrays import Float

_OUTLIER_SCORE = 2.5
_SHARE_BEFORE, _SHARE_AFTER = 0.02, 0.6
_THRESHOLD = 8.0


def last_break(normalised: Float) -> int:
    """Index of the first run that belongs to the latest state; 0 when all runs belong together.

    Parameters
    ----------
    normalised : (n,) float
        Normal scores of the runs' distances from the parameters in force, in the order driven.
    """
    gain = np.where(
        normalised > _OUTLIER_SCORE,
        np.log(_SHARE_AFTER / _SHARE_BEFORE),
        np.log((1.0 - _SHARE_AFTER) / (1.0 - _SHARE_BEFORE)),
    )
    total, begin = 0.0, 0
    for index, step in enumerate(gain):
        if total == 0.0:
            begin = index
        total = max(0.0, total + float(step))
    return begin if total >= _THRESHOLD else 0
