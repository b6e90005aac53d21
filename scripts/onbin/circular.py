"""Whether complex coefficients differ from zero or from each other: T²circ, Victor & Mast 1991."""

import numpy as np

from onbin.distributions import f_survival


def t2circ(coefficients_uv: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """T²circ of Victor & Mast (1991) against zero, and its p: K·T²circ ~ F(2, 2K − 2).

    Parameters
    ----------
    coefficients_uv : ndarray of complex, shape (n_windows, ...)

    Returns
    -------
    statistic, p : ndarray, shape (...)
    """
    K = len(coefficients_uv)
    mean = coefficients_uv.mean(axis=0)
    scatter = (np.abs(coefficients_uv - mean) ** 2).sum(axis=0)
    statistic = (K - 1) * np.abs(mean) ** 2 / scatter
    return statistic, f_survival(K * statistic, 2, 2 * K - 2)


def t2circ_two(first_uv: np.ndarray, second_uv: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """T²circ between two independent sets of windows: F and p, with (2, 2K₁ + 2K₂ − 4) df."""
    K1, K2 = len(first_uv), len(second_uv)
    means = first_uv.mean(axis=0), second_uv.mean(axis=0)
    scatter = sum(
        (np.abs(z - m) ** 2).sum(axis=0) for z, m in zip((first_uv, second_uv), means, strict=True)
    )
    statistic = (K1 + K2 - 2) * np.abs(means[0] - means[1]) ** 2 / scatter
    f = K1 * K2 / (K1 + K2) * statistic
    return f, f_survival(f, 2, 2 * K1 + 2 * K2 - 4)
