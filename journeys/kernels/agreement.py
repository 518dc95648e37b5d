"""How far transition counts are from a transition matrix given beforehand."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from journeys.kernels.arrays import FloatArray


@dataclass(frozen=True)
class Agreement:
    """Two tests of counts against a given matrix.

    Attributes
    ----------
    x2, g2 : float
        Pearson's and the likelihood-ratio statistic, without a continuity correction;
        infinite where a move was counted that the matrix rules out.
    df : int
        Degrees of freedom: over the rows that hold counts, possible moves less one.
    p_x2, p_g2 : float
        Probabilities of a statistic at least as large, by the chi-squared distribution.
    """

    x2: float
    g2: float
    df: int
    p_x2: float
    p_g2: float


def against_matrix(counts: FloatArray, matrix: FloatArray) -> Agreement:
    """Test transition counts against a matrix given beforehand.

    Parameters
    ----------
    counts : float array, shape (n_states, n_targets)
        Moves counted.
    matrix : float array, shape (n_states, n_targets)
        Probabilities of the moves; each row sums to 1.

    Returns
    -------
    Agreement

    Raises
    ------
    ValueError
        If the shapes differ.

    References
    ----------
    S. Kullback, M. Kupperman and H. H. Ku, Tests for contingency tables and Markov
    chains, Technometrics 4 (1962) 573-608.

    Examples
    --------
    >>> import numpy as np
    >>> counts = np.array([[30.0, 70.0], [50.0, 50.0]])
    >>> test = against_matrix(counts, np.array([[0.25, 0.75], [0.5, 0.5]]))
    >>> round(test.x2, 4), test.df, round(test.p_x2, 4)
    (1.3333, 2, 0.5134)
    """
    if counts.shape != matrix.shape:
        raise ValueError(
            f"counts have the shape {counts.shape}, the matrix {matrix.shape}; the two must be equal"
        )
    expected = counts.sum(axis=1, keepdims=True) * matrix
    possible = expected > 0
    if np.any((counts > 0) & ~possible):
        x2 = g2 = np.inf
    else:
        seen, due = counts[possible], expected[possible]
        x2 = float(np.sum((seen - due) ** 2 / due))
        some = seen > 0
        g2 = max(0.0, 2.0 * float(np.sum(seen[some] * np.log(seen[some] / due[some]))))
    df = int(np.sum(np.maximum(possible.sum(axis=1) - 1, 0)))
    return Agreement(x2, g2, df, _upper_tail(df, x2), _upper_tail(df, g2))


def _upper_tail(df: int, statistic: float) -> float:
    from scipy.special import chdtrc

    if np.isinf(statistic):
        return 0.0
    return float(chdtrc(df, statistic)) if df > 0 else 1.0
