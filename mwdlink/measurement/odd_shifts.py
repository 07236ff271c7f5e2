"""Shift factors that no melt has: they rise with temperature, or no law goes through them."""

from __future__ import annotations

import numpy as np

from mwdlink.chains.shift import ZERO_CELSIUS
from mwdlink.errors import Caution
from mwdlink.measurement.shift_laws import LawFit

# A law misses the shifts when it passes them by more than both: the first is 12 % in frequency, far
# more than set points and superposition leave open (common practice), the second is in their own
# errors (three standard deviations).
MISSED_DECADES, MISSED_CHI2 = 0.05, 9.0
# a shift that rises by more than this towards higher temperature is told [decades]
RISE = 0.02
# without the odd step the others must lie this close to one line, and this many times closer
CLOSE_DECADES, CLOSER = 0.03, 5.0
# factors between frequencies that have a name, and how near one must be (relative)
CYCLE, NEAR = 2.0 * np.pi, 0.1


def misses(law: LawFit) -> bool:
    """Whether a law is no description of the shifts."""
    return (
        law.chi2_per_point is not None
        and law.residual_decades > MISSED_DECADES
        and law.chi2_per_point > MISSED_CHI2
    )


def odd_step(T: np.ndarray, y: np.ndarray) -> tuple[int, float] | None:
    """The one step without which all others lie on a line against 1/T.

    Parameters
    ----------
    T : ndarray of shape (k,)
        [C], ascending; k >= 4, or none can be told.
    y : ndarray of shape (k,)
        log10 a_T.

    Returns
    -------
    (int, float) or None
        Its index, and how far it lies off the others' line [decades of a_T].
    """
    if T.size < 4:
        return None
    x = 1.0 / (T + ZERO_CELSIUS)
    everywhere = _off(x, y, np.ones(T.size, dtype=bool))
    without = []
    for k in range(T.size):
        keep = np.arange(T.size) != k
        without.append((float(np.sqrt(np.mean(_off(x, y, keep)[keep] ** 2))), k))
    least, k = min(without)
    if least > CLOSE_DECADES or CLOSER * least > float(np.sqrt(np.mean(everywhere**2))):
        return None
    # with four steps two may do as well: then it is not known which
    if sorted(without)[1][0] < CLOSER * max(least, 1e-3):
        return None
    return k, float(_off(x, y, np.arange(T.size) != k)[k])


def _off(x: np.ndarray, y: np.ndarray, keep: np.ndarray) -> np.ndarray:
    """Distance of all points from the line through some of them."""
    slope, level = np.polyfit(x[keep] - x.mean(), y[keep], 1)
    return np.asarray(y - level - slope * (x - x.mean()))


def shift_cautions(T: np.ndarray, y: np.ndarray, law: LawFit) -> tuple[Caution, ...]:
    """What is odd about shift factors; empty where a law follows them and they fall.

    Parameters
    ----------
    T : ndarray of shape (k,)
        [C], ascending.
    y : ndarray of shape (k,)
        log10 a_T.
    law : LawFit
        The one preferred.
    """
    rises = np.flatnonzero(np.diff(y) > RISE)
    missed = misses(law)
    if not missed and not rises.size:
        return ()
    told = []
    if rises.size:
        k = int(rises[0])
        told.append(
            f"From {T[k]:.4g} to {T[k + 1]:.4g} C the shift factor rises, {10 ** y[k]:.3g} to "
            f"{10 ** y[k + 1]:.3g}: every melt relaxes faster when it is warmer"
        )
    if missed:
        told.append(
            "No law goes through the shifts: the better one misses them by "
            f"{law.residual_decades:.2g} decades, and its constants say nothing"
        )
    found = odd_step(T, y)
    if found is not None:
        k, off = found
        factor = 10.0 ** abs(off)
        name = ""
        if abs(factor / CYCLE - 1.0) < NEAR:
            name = ", about 2 pi, as Hz taken for rad/s or the other way round gives"
        told.append(
            f"Without the step at {T[k]:.4g} C the others follow an Arrhenius law; its times are "
            f"a factor {factor:.3g} {'longer' if off > 0 else 'shorter'} than theirs let expect"
            f"{name}"
        )
    told.append(
        "Check the temperatures, the unit of the frequency and of the moduli, and whether all "
        "sweeps are of one sample"
    )
    return (Caution("shifts_odd", ". ".join(told) + "."),)
