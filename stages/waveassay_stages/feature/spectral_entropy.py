"""Shannon entropy of a spectrum taken as a distribution of power over frequency."""

from typing import Literal

import numpy as np
from pydantic import Field

from waveassay.contract import (
    ColumnSpec,
    EachRow,
    Features,
    FeaturesSpec,
    Findings,
    Floats,
    Hertz,
    Kind,
    Params,
    Spectra,
    SpectraSpec,
    Stage,
    check_band,
    features_of,
)
from waveassay_stages.feature._bands import bins_inside, check_bins, spacing
from waveassay_stages.feature._rows import missing_reasons, of_what
from waveassay_stages.feature._shared import in_double

_SOURCE = "T. Inouye et al., Electroencephalogr. Clin. Neurophysiol. 79, 204-210, 1991"


class SpectralEntropyParams(Params):
    """Parameters of `feature.spectral_entropy`."""

    within: tuple[Hertz, Hertz] = Field(description="Range of frequencies taken.")
    normalised: bool = Field(
        default=True,
        description="true: divided by the entropy of a flat spectrum, from 0 to 1; false: bits.",
    )
    edges: Literal["lower_in", "both_in"] = Field(
        default="lower_in",
        description="lower_in: a bin on the lower limit is in and one on the upper is out; "
        "both_in: both are in.",
    )


def spectral_entropy(density: Floats, *, normalised: bool) -> Floats:
    r"""Return the entropy of each row over its bins.

    .. math:: H = -\sum_k p_k \log_2 p_k, \qquad p_k = S_k / \sum_j S_j

    with :math:`0 \log_2 0 = 0`, divided by :math:`\log_2 n` of the n bins if ``normalised``.
    In bits it grows with the number of bins: compare only spectra on the same bins.

    Parameters
    ----------
    density : densities (or powers: only their ratios count) at the bins taken, shape (rows, n).
    normalised : whether to divide by the entropy of a flat spectrum.

    Returns
    -------
    Entropy in bits, or from 0 to 1, shape (rows,); NaN where there is no power, or where a
    single bin is to be normalised.

    References
    ----------
    C. E. Shannon, Bell Syst. Tech. J. 27, 379-423, 1948.
    T. Inouye et al., Electroencephalogr. Clin. Neurophysiol. 79, 204-210, 1991.
    """
    entropy = np.full(density.shape[0], np.nan)
    bins = density.shape[1]
    if normalised and bins < 2:
        return entropy
    total = np.add.reduce(density, axis=-1, dtype=np.float64)
    found = np.flatnonzero(total > 0)
    if found.size < total.size:
        density, total = density[found], total[found]
    share = density / total[:, None]
    if np.min(share, initial=1.0) > 0:
        information = np.log2(share)
    else:
        information = np.zeros(share.shape)
        np.log2(share, out=information, where=share > 0)
    information *= share
    bits = -np.add.reduce(information, axis=-1)
    # A single line has entropy 0, not -0.
    entropy[found] = np.maximum(bits, 0.0) + 0.0
    if normalised:
        entropy[found] = np.minimum(entropy[found] / np.log2(bins), 1.0)
    return entropy


def spec(params: SpectralEntropyParams, given: SpectraSpec, findings: Findings) -> FeaturesSpec:
    """Check the range, and give one number."""
    check_band(*params.within, given, findings, "within")
    check_bins(*params.within, given, findings, "within", least=2, edges=params.edges)
    low, high = params.within
    meaning = f"Shannon entropy of the power from {low:g} to {high:g} Hz"
    if params.normalised:
        meaning += ", 1 for a flat spectrum"
    column = ColumnSpec("", "1" if params.normalised else "bit", meaning + of_what(given))
    return FeaturesSpec(given.signal, (column,), averaged=given.averaged)


def run(params: SpectralEntropyParams, spectra: Spectra) -> Features:
    """Return the entropy of each row; NaN in rows that are not kept."""
    freq = spectra.freq_hz
    inside = bins_inside(*params.within, spacing(freq), freq.size, params.edges)
    taken = in_double(spectra.density)[:, inside]
    entropy = spectral_entropy(taken, normalised=params.normalised)
    reasons = missing_reasons(spectra.rows, [(np.isnan(entropy), "no power in within")])
    return Features(spectra.signal, spectra.rows, {"": entropy}, reasons)


STAGE = Stage(
    name="feature.spectral_entropy",
    version=1,
    params=SpectralEntropyParams,
    takes=(Kind.SPECTRA, Kind.AVERAGES),
    gives=features_of,
    spec=spec,
    run=run,
    context=EachRow(),
    example={"within": ["0.5 Hz", "30 Hz"], "normalised": True},
    source=_SOURCE,
)
