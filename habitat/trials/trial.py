"""What one chamber run brings to the analysis, whatever file it came from."""

from dataclasses import dataclass, field

import numpy as np


@dataclass(frozen=True)
class Trial:
    """One animal in one chamber run, from oxygen-rich to oxygen-poor water, in the order of time.

    Attributes
    ----------
    name : str
    individual : str
        The animal; the trial's own name where the file does not say.
    temperature : float
        Mean over the observations [degC].
    po2 : numpy.ndarray
        Oxygen partial pressure as read, without any correction of the sensor [kPa].
    rate : numpy.ndarray
        Metabolic rate [umol/g/h].
    mass : float or None
        Body mass [g].
    salinity : float or None
        Mean over the observations [1].
    time : numpy.ndarray or None
        Since the start of the trial [h].
    rate_error : numpy.ndarray or None
        Standard error of each rate, where a trace was regressed [umol/g/h].
    excluded : dict
        Reason to number of observations or windows left out before the analysis.
    """

    name: str
    individual: str
    temperature: float
    po2: np.ndarray
    rate: np.ndarray
    mass: float | None = None
    salinity: float | None = None
    time: np.ndarray | None = None
    rate_error: np.ndarray | None = None
    excluded: dict[str, int] = field(default_factory=dict)
