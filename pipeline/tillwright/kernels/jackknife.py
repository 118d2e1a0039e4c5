"""Standard errors by leaving groups out."""

from __future__ import annotations

import numpy as np

from tillwright.kernels.pairs import Array


def standard_errors(replicates: Array) -> Array:
    """(…) standard errors of an estimate from its (G, …) delete-a-group replicates.

    √((G − 1)/G · Σ_g (θ_g − mean θ)²), in the units of θ. NaN where a replicate is NaN.

    Parameters
    ----------
    replicates : the estimate made without group g, for each of G ≥ 2 random groups of about equal size.

    Reference: Tukey (1958); Kott (2001), The delete-a-group jackknife, Journal of Official Statistics 17.
    """
    groups = len(replicates)
    spread = replicates - replicates.mean(axis=0)
    errors: Array = np.sqrt((groups - 1) / groups * (spread**2).sum(axis=0))
    return errors
