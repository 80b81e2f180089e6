"""Marks that come in clusters, for the tests of rates."""

from __future__ import annotations

import numpy as np
from scipy.special import ndtri


def markov(rng, series, steps, share, run):
    """A two-state chain with a share of marks in runs of a mean length."""
    stays = 1 - 1 / run
    enters = share * (1 - stays) / (1 - share)
    u = rng.random((series, steps))
    x = np.empty((series, steps))
    x[:, 0] = u[:, 0] < share
    for t in range(1, steps):
        x[:, t] = u[:, t] < np.where(x[:, t - 1] > 0, stays, enters)
    return x


def latent(rng, series, steps, share, phi):
    """Marks where a hidden normal AR(1) lies under its quantile."""
    z = rng.standard_normal((series, steps))
    for t in range(1, steps):
        z[:, t] = phi * z[:, t - 1] + np.sqrt(1 - phi**2) * z[:, t]
    return (z < ndtri(share)).astype(float)


CLUSTERS = {
    "white .05": (0.05, lambda rng, series, steps: (rng.random((series, steps)) < 0.05).astype(float)),
    "Markov .02 in fours": (0.02, lambda rng, series, steps: markov(rng, series, steps, 0.02, 4)),
    "Markov .05 in eights": (0.05, lambda rng, series, steps: markov(rng, series, steps, 0.05, 8)),
    "Markov .2 in fives": (0.2, lambda rng, series, steps: markov(rng, series, steps, 0.2, 5)),
    "latent .05 at .9": (0.05, lambda rng, series, steps: latent(rng, series, steps, 0.05, 0.9)),
    "latent .3 at .9": (0.3, lambda rng, series, steps: latent(rng, series, steps, 0.3, 0.9)),
    "latent .1 at .6": (0.1, lambda rng, series, steps: latent(rng, series, steps, 0.1, 0.6)),
}
"""Share and generator of the cells that rates are held against."""
