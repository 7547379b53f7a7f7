"""The chance of a larger contradiction between figures that should agree (chi-square).

Knows nothing of what was compared.
"""

from __future__ import annotations


def chance_of_more(chi_square: float, degrees: int) -> float:
    """Probability that chi-square of so many degrees of freedom exceeds a value; 1 where there are none."""
    from scipy.special import gammaincc

    return float(gammaincc(0.5 * degrees, 0.5 * chi_square)) if degrees else 1.0
