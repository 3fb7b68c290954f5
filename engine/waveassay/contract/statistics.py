"""Statistics that several stages share."""


def confidence_factors(dof: float, level: float) -> tuple[float, float]:
    r"""Return the factors that turn a spectral estimate into its confidence band.

    .. math::

        \Bigl[\ \frac{\nu}{\chi^2_{1 - a/2}(\nu)},\quad \frac{\nu}{\chi^2_{a/2}(\nu)}\ \Bigr],
        \qquad a = 1 - \mathrm{level}

    with :math:`\chi^2_p(\nu)` the p-quantile of chi-square. The band holds for an estimate that
    is distributed as the true density times chi-square over its degrees of freedom.

    Parameters
    ----------
    dof : equivalent degrees of freedom nu of the estimate; NaN where there is none.
    level : coverage, between 0 and 1, such as 0.95.

    Returns
    -------
    The lower factor (below 1) and the upper one; both NaN where ``dof`` is.

    Raises
    ------
    ValueError
        When ``dof`` is not above 0 or ``level`` not between 0 and 1.

    References
    ----------
    D. B. Percival, A. T. Walden, Spectral Analysis for Physical Applications, Cambridge University
    Press 1993, chapter 6.
    """
    from math import isnan, nan

    from scipy.special import chdtri  # the upper tail: chdtri(nu, q) is the (1 - q)-quantile

    if not 0 < level < 1:
        raise ValueError(f"the level must lie between 0 and 1, and is {level:g}")
    if isnan(dof):
        return nan, nan
    if not dof > 0:
        raise ValueError(f"degrees of freedom must be above 0, and are {dof:g}")
    tail = (1 - level) / 2
    return float(dof / chdtri(dof, tail)), float(dof / chdtri(dof, 1 - tail))
