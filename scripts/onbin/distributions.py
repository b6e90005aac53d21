"""Tail probabilities, without the second that importing all of scipy's distributions takes."""

import numpy as np


def f_survival(statistic: np.ndarray, numerator: float, denominator: float) -> np.ndarray:
    """Probability of a larger value of Fisher's F."""
    from scipy.special import fdtrc

    return fdtrc(numerator, denominator, statistic)


def chi2_survival(statistic: np.ndarray, degrees_of_freedom: float) -> np.ndarray:
    """Probability of a larger value of χ²."""
    from scipy.special import chdtrc

    return chdtrc(degrees_of_freedom, np.maximum(statistic, 0))
