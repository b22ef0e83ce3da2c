"""How likely a trial's observations are: a demand that wanders above rest, cut off by what oxygen allows.

The animal asks for a demand ``d`` and gets ``MO2 = min(d, alpha (P + c))``, with P the reading and c the sensor offset
(Pcrit = rest / alpha: J. Exp. Biol. 224, jeb242210, doi:10.1242/jeb.242210). Demand is at rest, within a narrow normal
spread, or active: rest plus an excess drawn from two exponential distributions, one with a tenth of the mean of the
other, which together resemble what bursts with a decay leave behind. With normal errors the demand integrates out in
closed form, so that every observation is a mixture of *limited* (on the line), *free* (below it) and, rarely, an
outlier. A slow additive error of the rate that grows over the trial stands for background that was not subtracted.

Rates are in units of `rate_scale` inside this module, so that every parameter has a weak normal prior.
"""

from dataclasses import dataclass

import numpy as np
from scipy.special import expit, log_ndtr, ndtr

PARAMETERS = (
    "ln_supply_capacity",  # [rate_scale/kPa]
    "offset",  # [kPa]
    "ln_rest",  # [rate_scale]
    "ln_rest_spread",  # of rest
    "logit_active",  # share of the time that the animal is active
    "logit_slow",  # share of the slower of the two excesses
    "ln_excess",  # mean of the slower excess, of rest
    "ln_relative_error",  # of the rate
    "ln_absolute_error",  # of rest
    "background",  # additive error of the rate at the end of the trial, of rest
)
"""Order of the columns of every parameter array."""

PO2_SD = 0.02
"""Random error of one PO2 reading [kPa]; part of the scatter along the supply line."""
OFFSET_SD = 0.2
"""Prior standard deviation of the sensor offset, the upper end of common corrections: 1 % of air saturation [kPa]."""
OUTLIER_SHARE = 0.005
"""Share of observations that obey no model."""
FAST_EXCESS = 0.1
"""Mean of the faster excess, of the slower one's."""
PRIOR_REACH = 8.0
"""Standard deviations of the prior beyond which parameters are held, to keep exponentials finite."""


@dataclass(frozen=True)
class Observations:
    """One trial, scaled, with its priors.

    Attributes
    ----------
    po2 : ndarray, shape (n,)
        Readings [kPa].
    rate : ndarray, shape (n,)
        [rate_scale].
    rate_scale : float
        [umol/g/h]
    prior_mean, prior_sd : ndarray, shape (len(PARAMETERS),)
    """

    po2: np.ndarray
    rate: np.ndarray
    rate_scale: float
    prior_mean: np.ndarray
    prior_sd: np.ndarray

    @classmethod
    def of_trial(cls, po2: np.ndarray, rate: np.ndarray, background_sd: float) -> "Observations":
        """Scale a trial by its lower rates in the better half of its oxygen."""
        scale = max(float(np.quantile(rate[po2 >= np.median(po2)], 0.25)), 0.05 * float(rate.max()))
        priors = {
            "ln_supply_capacity": (-np.log(0.15 * float(po2.max())), 2.0),
            "offset": (0.0, OFFSET_SD),
            "ln_rest": (0.0, 1.0),
            "ln_rest_spread": (np.log(0.02), 0.5),
            "logit_active": (-1.0, 1.5),
            "logit_slow": (0.0, 1.0),
            "ln_excess": (0.0, 0.5),
            "ln_relative_error": (np.log(0.05), 0.6),
            "ln_absolute_error": (np.log(0.025), 0.6),
            "background": (0.0, background_sd),
        }
        mean, sd = np.array([priors[name] for name in PARAMETERS]).T
        return cls(po2, rate / scale, scale, mean, sd)

    @property
    def elapsed(self) -> np.ndarray:
        """Share of the trial gone by at each observation, 0 to 1."""
        return np.linspace(0.0, 1.0, self.po2.size)

    @property
    def step(self) -> np.ndarray:
        """Natural step of every parameter: the prior's spread, but no more than a fifth where it says little."""
        return np.minimum(self.prior_sd, 0.2)

    def log_prior(self, theta: np.ndarray, *, limit: bool = True) -> np.ndarray:
        """Log density of the priors, up to a constant; with a limit, true oxygen is never negative."""
        z = (theta - self.prior_mean) / self.prior_sd
        density = -0.5 * (z * z).sum(axis=1)
        if limit:
            density += log_ndtr((self.po2.min() + theta[:, PARAMETERS.index("offset")]) / PO2_SD)
        return density

    def log_posterior(self, theta: np.ndarray, *, limit: bool = True) -> np.ndarray:
        """Log posterior density of parameter sets, up to a constant.

        Parameters
        ----------
        theta : ndarray, shape (m, len(PARAMETERS))
        limit : bool
            False for an animal that oxygen never limits.

        Returns
        -------
        ndarray, shape (m,)
        """
        limited, free, outlier = self.densities(theta, limit=limit)
        return np.log(np.maximum(limited + free + outlier, 1e-300)).sum(axis=1) + self.log_prior(theta, limit=limit)

    def log_posterior_without_limit(self, theta: np.ndarray) -> np.ndarray:
        """As `log_posterior` for an animal that oxygen never limits; capacity and offset keep their priors."""
        return self.log_posterior(theta, limit=False)

    def densities(self, theta: np.ndarray, *, limit: bool = True) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Density of every observation as limited, as free, and as an outlier; the three add up.

        Returns
        -------
        limited, free, outlier : ndarray, shape (m, n)
        """
        reach = PRIOR_REACH * self.prior_sd
        held = np.clip(theta, self.prior_mean - reach, self.prior_mean + reach)
        capacity, offset, rest, spread, active, slow, excess, relative, absolute, background = held.T[:, :, None]
        capacity, rest, active, slow = np.exp(capacity), np.exp(rest), expit(active), expit(slow)
        spread, excess, absolute = (rest * np.exp(of_rest) for of_rest in (spread, excess, absolute))
        relative = np.exp(relative)
        rate = self.rate - background * rest * self.elapsed

        supply = capacity * (self.po2 + offset) if limit else np.full((1, self.po2.size), 1e3 * np.abs(self.rate).max())
        supply_sd = np.sqrt((relative * supply) ** 2 + absolute**2 + (capacity * PO2_SD) ** 2)
        on_line = _normal(rate, supply, supply_sd) if limit else 0.0

        at_rest, asks_more = _at_rest(rate, supply, rest, spread, np.hypot(relative * rest, absolute))
        limited, free = (1.0 - active) * asks_more, (1.0 - active) * at_rest
        error = np.hypot(relative * np.maximum(rate, rest), absolute)
        for share, mean in ((active * slow, excess), (active * (1.0 - slow), FAST_EXCESS * excess)):
            in_burst, asks_more = _in_burst(rate, supply, rest, mean, error)
            limited, free = limited + share * asks_more, free + share * in_burst
        outlier = np.broadcast_to(_normal(rate, rest, np.abs(self.rate).max()), free.shape)
        kept = 1.0 - OUTLIER_SHARE
        return kept * limited * on_line, kept * free, OUTLIER_SHARE * outlier


def _normal(x: np.ndarray, mean: np.ndarray, sd: np.ndarray) -> np.ndarray:
    """Return the normal density."""
    z = (x - mean) / sd
    return np.exp(-0.5 * z * z) / (sd * np.sqrt(2.0 * np.pi))


def _at_rest(
    rate: np.ndarray, supply: np.ndarray, rest: np.ndarray, spread: np.ndarray, error: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Density of a rate whose normal demand stays below supply, and the chance that the demand exceeds it."""
    variance = error**2 + spread**2
    demand = (rate * spread**2 + rest * error**2) / variance
    demand_sd = spread * error / np.sqrt(variance)
    free = _normal(rate, rest, np.sqrt(variance)) * ndtr((supply - demand) / demand_sd)
    return free, ndtr((rest - supply) / spread)


def _in_burst(
    rate: np.ndarray, supply: np.ndarray, rest: np.ndarray, excess: np.ndarray, error: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """As `_at_rest` for a demand of rest plus an exponential excess (exponentially modified normal, cut at supply)."""
    top = np.maximum(supply, rest)
    mode = rate - error**2 / excess
    height = np.exp(np.minimum(0.5 * (error / excess) ** 2 - (rate - rest) / excess, 300.0)) / excess
    return height * (ndtr((mode - rest) / error) - ndtr((mode - top) / error)), np.exp((rest - top) / excess)
