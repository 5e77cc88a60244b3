"""Finds the curves: multinomial logistic regression on the piecewise-linear basis, with a penalty on the weights."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize

from rxchain.identify.evidence import TEMPLATES, hats
from rxchain.streams import Floats

_KNOTS = 5
_PENALTY = 0.1  # per window; the curves stay smooth where few windows lie


def knots_of(values: Floats) -> Floats:
    """Where the curves bend: at quantiles of each measurement, (measurements, 5), ascending."""
    at = np.quantile(values, np.linspace(0.02, 0.98, _KNOTS), axis=0).T
    least = 1e-3 * np.maximum(np.ptp(values, axis=0), 1.0)[:, None]
    return np.asarray(np.maximum.accumulate(at, axis=1) + least * np.arange(_KNOTS))


def weights_of(values: Floats, labels: NDArray[np.int64], knots: Floats) -> Floats:
    """Nats for each template and knot, (templates, measurements * knots)."""
    basis = hats(values, knots)
    n, width = basis.shape
    wanted = np.eye(len(TEMPLATES))[labels]

    def cost(flat: Floats) -> tuple[float, Floats]:
        weights = flat.reshape(len(TEMPLATES), width)
        scores = basis @ weights.T
        scores -= scores.max(axis=1, keepdims=True)
        log_sum = np.log(np.exp(scores).sum(axis=1))
        loss = float(np.mean(log_sum - np.sum(scores * wanted, axis=1)))
        chances = np.exp(scores - log_sum[:, None])
        gradient = (chances - wanted).T @ basis / n + _PENALTY / n * 2.0 * weights
        return loss + _PENALTY / n * float(np.sum(weights**2)), gradient.ravel()

    found = minimize(cost, np.zeros(len(TEMPLATES) * width), jac=True, method="L-BFGS-B", options={"maxiter": 600})
    return np.asarray(found.x.reshape(len(TEMPLATES), width))
