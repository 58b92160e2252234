r"""Whether a chain says enough, and how well it says it.

Autocorrelation time tau: steps after which a walker has forgotten where it was, from the
autocorrelation of the walkers up to a window of five times tau (A. Sokal, Monte Carlo
Methods in Statistical Mechanics, 1989, from memory). It is taken about the mean of all
walkers, not about the mean of each: walkers that are stuck in different places have not
forgotten anything, and it must show. Effective sample size: draws over tau. Monte Carlo
standard error of a mean: sd over the square root of the effective sample size.

Agreement compares ensembles that were seeded independently, never walkers of one ensemble.
With ensemble means m_e and Monte Carlo standard errors s_e, sum_e ((m_e - m)/s_e)^2
follows a chi-square law with one degree of freedom less than there are ensembles, if
they sample the same thing.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import chdtrc

_WINDOW = 5.0
# Below so many autocorrelation times neither tau nor a quantile means much (emcee's own advice).
LEAST_LENGTH = 50.0
# Steps at the start that may still remember it: discarded, unless the warm-up took care of them.
_FORGET = 10.0
# Chance that ensembles which do agree are said to disagree, over all quantities together.
_FALSE_ALARM = 1e-3


@dataclass(frozen=True, eq=False)
class Diagnostics:
    """How well a chain determines the mean of each of q quantities.

    Attributes
    ----------
    tau : ndarray of float, shape (q,)
        Autocorrelation time, steps; never below 1.
    ess : ndarray of float, shape (q,)
        Effective sample size.
    mcse : ndarray of float, shape (q,)
        Monte Carlo standard error of the mean, in the unit of the quantity.
    disagreement : ndarray of float, shape (q,)
        Spread of the ensemble means over what their Monte Carlo standard errors explain: near 1 where
        the ensembles agree. NaN for a single ensemble.
    length : float
        Steps of the chain in units of the longest autocorrelation time.
    agree : bool
        Whether no quantity differs between ensembles by more than chance explains.
    """

    tau: np.ndarray
    ess: np.ndarray
    mcse: np.ndarray
    disagreement: np.ndarray
    length: float
    agree: bool

    @property
    def converged(self) -> bool:
        """Long enough, and the ensembles agree."""
        return self.agree and self.length >= LEAST_LENGTH


def diagnose(draws: np.ndarray) -> Diagnostics:
    """Diagnostics of a chain.

    Parameters
    ----------
    draws : ndarray of float, shape (steps, ensembles, walkers, q)
        Quantities that vary.
    """
    steps, ensembles, walkers, count = draws.shape
    tau = autocorrelation_times(draws)
    spread = draws.std(axis=(0, 1, 2))
    ess = steps * ensembles * walkers / tau
    mcse = spread / np.sqrt(ess)
    means = draws.mean(axis=(0, 2))
    squares = (((means - means.mean(axis=0)) / (mcse * np.sqrt(ensembles))) ** 2).sum(axis=0)
    free = ensembles - 1
    return Diagnostics(
        tau=tau,
        ess=ess,
        mcse=mcse,
        disagreement=np.sqrt(squares / free) if free else np.full(count, np.nan),
        length=float(steps / tau.max()),
        agree=bool(free == 0 or np.all(chdtrc(free, squares) > _FALSE_ALARM / count)),
    )


def autocorrelation_times(draws: np.ndarray) -> np.ndarray:
    """Autocorrelation time of each quantity in steps, at least 1; `draws` as for `diagnose`."""
    steps, ensembles, walkers, count = draws.shape
    times = [_autocorrelation_time(draws[..., i].reshape(steps, ensembles * walkers)) for i in range(count)]
    return np.maximum(times, 1.0)


def _autocorrelation_time(series: np.ndarray) -> float:
    """1 + 2 sum of the autocorrelation up to the first lag that is `_WINDOW` times the sum; series (steps, walkers)."""
    steps = len(series)
    padded = 2 ** int(np.ceil(np.log2(2 * steps)))
    spectrum = np.fft.rfft(series - series.mean(), n=padded, axis=0)
    correlation = np.fft.irfft((np.abs(spectrum) ** 2).sum(axis=1), n=padded)[:steps]
    times = 2.0 * np.cumsum(correlation / correlation[0]) - 1.0
    beyond = np.arange(steps) >= _WINDOW * times
    return float(times[np.argmax(beyond)] if np.any(beyond) else times[-1])


def steps_to_discard(draws: np.ndarray, warm_up: int) -> int:
    """Steps at the start that may still remember it, beyond a warm-up that was not kept; half at the most."""
    longest = float(autocorrelation_times(draws).max())
    return int(np.clip(np.ceil(_FORGET * longest) - warm_up, 0, len(draws) // 2))


def steps_wanted(tau: np.ndarray, *, ess: float, walkers: int) -> int:
    """Steps after which every quantity has this effective sample size and the chain is long enough.

    Parameters
    ----------
    tau : ndarray of float, shape (q,)
    ess : float
    walkers : int
        Of all ensembles together.
    """
    longest = float(tau.max())
    return int(np.ceil(longest * max(LEAST_LENGTH, ess / walkers)))
