"""The common shape of what every other method of inversion returns."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from mwdlink.errors import Caution
from mwdlink.inversion.choose import Curve
from mwdlink.quantity import readonly


@dataclass(frozen=True, eq=False)
class MethodFit:
    """A distribution on the nodes of a problem, by any method.

    Attributes
    ----------
    method : str
        `tikhonov`, `mixture` or `generalised-exponential`.
    nodes : ndarray of shape (n,)
        [g/mol]
    w : ndarray of shape (n + 2,)
        Weight of every node, of the lump below and of the lump above [-], sum 1.
    chi2 : float
        Sum of squared misfits.
    smoothing : float or None
        lambda, where the method has one.
    converged : bool
    curve : Curve or None
        The scan of lambda (or of the number of parts) with the figures it was chosen by.
    members : ndarray of shape (m, n + 2)
        Refits to perturbed data and prior.
    notes : tuple of Caution
    """

    method: str
    nodes: np.ndarray
    w: np.ndarray
    chi2: float
    smoothing: float | None
    converged: bool
    curve: Curve | None
    members: np.ndarray
    notes: tuple[Caution, ...] = ()

    def __post_init__(self) -> None:
        for name in ("nodes", "w", "members"):
            object.__setattr__(self, name, readonly(getattr(self, name)))
