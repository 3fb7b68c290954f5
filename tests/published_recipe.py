"""The recipe of the run that the published values are checked through: many short chains."""

from collections.abc import Iterable, Mapping, Sequence

from made_recordings import (
    ALIASES,
    APART_HZ,
    CONDITIONS,
    CUTOFF_HZ,
    ORDERS,
    PULSES,
    QUANTILES_HZ,
    RANDOM_ERROR_HZ,
    alias_name,
    filter_tones,
)

#: Units that the recipe asks for where they are not those of the file.
OTHER_UNITS = {"in_kpa": "mmHg", "in_cmh2o": "mmHg", "in_mmhg": "kPa"}
_TWO_S = "epoch.consecutive: {length: 2 s}"
_TEN_S = "epoch.consecutive: {length: 10 s}"
_TWENTY_S = "epoch.consecutive: {length: 20 s}"
_RECTANGLE = "spectrum.periodogram: {window: rectangle, detrend: none}"
_HANN = "spectrum.periodogram: {window: hann, detrend: none}"
_AVERAGE = "spectrum.average: {of: mean, over: power}"
_TABLE = "export.table: {}"
#: Averaged spectra come as CSV where their chain has a table.
_AVERAGE_TABLE = [_AVERAGE, "feature.band_power: {bands: {low: [1 Hz, 25 Hz]}}", _TABLE]
_ALL = "feature.band_power: {bands: {all: [0 Hz, 125 Hz]}}\n      as: power"


def recipe_text(units: Mapping[str, str]) -> str:
    """Return the recipe; ``units`` is signal -> the unit of its file."""
    lines = ["recipe: published-values", "edition: 1", "precision: double", "signals:"]
    for name, unit in units.items():
        wanted = OTHER_UNITS.get(name, unit)
        lines.append(f"  {name}: {{labels: [{name}], unit: {wanted}, optional: true}}")
    lines += ["conditions:", "  whole: {start: {time: 0 s}}"]
    for name, epochs in CONDITIONS.items():
        lines.append(f"  {name}: {{start: {{time: 0 s}}, length: {(epochs + 1) / 2} s}}")
    lines.append("chains:")
    for name, (signals, steps) in _chains().items():
        lines.append(f"  {name}:")
        lines += [
            f"    - {step}" for step in (f"load: {{signals: [{', '.join(signals)}]}}", *steps)
        ]
    return "\n".join([*lines, ""])


def _chains() -> dict[str, tuple[Sequence[str], Sequence[str]]]:
    """Return chain -> its signals and its steps."""
    return {
        **_estimator_chains(),
        **_noise_chains(),
        **_feature_chains(),
        **_filter_chains(),
        **_pressure_chains(),
    }


def _at(frequencies_hz: Iterable[int], more: str = "") -> str:
    """Return a step that gives the power of single bins of half a Hz and more."""
    return _power(", ".join(f"at_{f}: [{f - 0.2} Hz, {f + 0.2} Hz]" for f in frequencies_hz), more)


def _power(bands: str, more: str = "") -> str:
    """Return a step that gives the power in bands written as YAML."""
    return f"feature.band_power: {{bands: {{{bands}}}{more}}}"


def _estimator_chains() -> dict[str, tuple[Sequence[str], Sequence[str]]]:
    peak = "feature.spectral_peak: {within: [5 Hz, 15 Hz], method: bin}"
    exact = ", integration: simpson, edges: both_in"
    return {
        "rectangle": (
            ["tone", "levels", "ar2", "offset_noise"],
            [
                _TWO_S,
                _RECTANGLE,
                _ALL,
                peak,
                _at((10, 20, 30, 40), ", express: decibel") + "\n      as: level",
                _TABLE,
            ],
        ),
        "hann": (["tone"], [_TWO_S, _HANN, _ALL, peak, _TABLE, _AVERAGE]),
        "halfway": (
            ["halfway"],
            [
                "epoch.consecutive: {length: 2 s, overlap: 50 %}",
                _RECTANGLE,
                _power("below: [62.4 Hz, 62.6 Hz], above: [62.9 Hz, 63.1 Hz]"),
                _TABLE,
            ],
        ),
        "dof": (
            ["tone"],
            ["epoch.consecutive: {length: 1 s, overlap: 50 %}", _HANN, *_AVERAGE_TABLE],
        ),
        **{
            f"tapers_{length}": (
                ["tone"],
                [
                    f"epoch.consecutive: {{length: {length} s}}",
                    f"spectrum.multitaper: {{half_bandwidth: {half} Hz, detrend: none, "
                    "zero_padding: four_times}",
                    _power(f"inside: [{10 - half} Hz, {10 + half} Hz]", exact),
                    _power("all: [0 Hz, 125 Hz]", exact) + "\n      as: whole",
                    _TABLE,
                    _AVERAGE,
                ],
            )
            for length, half in ((2, 1.5), (4, 0.5))
        },
    }


def _noise_chains() -> dict[str, tuple[Sequence[str], Sequence[str]]]:
    return {
        "white": (
            ["white_3"],
            [_TWENTY_S, "spectrum.welch: {segment: 2 s, detrend: none}", *_AVERAGE_TABLE],
        ),
        "tapered_noise": (
            ["white_1"],
            [
                _TWO_S,
                "spectrum.multitaper: {half_bandwidth: 1.5 Hz, tapers: 5, detrend: none}",
                _at(APART_HZ) + "\n      as: power",
                _TABLE,
                _AVERAGE,
            ],
        ),
        "hundred": (
            ["white_1"],
            [
                "epoch.consecutive: {length: 100 s}",
                "spectrum.welch: {segment: 1 s, overlap: 0 %, window: rectangle, detrend: none}",
                _at(RANDOM_ERROR_HZ) + "\n      as: power",
                _TABLE,
            ],
        ),
        "coarse": (["coarse"], ["epoch.consecutive: {length: 4 s}", _HANN, *_AVERAGE_TABLE]),
    }


def _feature_chains() -> dict[str, tuple[Sequence[str], Sequence[str]]]:
    low, high = QUANTILES_HZ
    entropy = (
        "feature.spectral_entropy: {within: [0.5 Hz, 124.5 Hz], edges: both_in, normalised: %s}"
    )
    by_rate: dict[int, list[str]] = {}
    for key in ALIASES:
        by_rate.setdefault(int(key.split("@")[1]), []).append(alias_name(key))
    return {
        **{
            f"aliases_{rate}": (
                names,
                [
                    _TWO_S,
                    _HANN,
                    f"feature.spectral_peak: {{within: [1 Hz, {rate / 2 - 1} Hz], method: bin}}",
                    _TABLE,
                ],
            )
            for rate, names in by_rate.items()
        },
        "quantiles": (
            ["flat", "one_over_f", "one_over_f2"],
            [
                "epoch.consecutive: {length: 100 s}",
                _RECTANGLE,
                *(
                    f"feature.spectral_edge: {{fraction: {share} %, within: [{low} Hz, {high} Hz]}}"
                    f"\n      as: below_{share}"
                    for share in (50, 90, 95)
                ),
                _TABLE,
            ],
        ),
        "entropy": (
            ["tone", "two_lines", "impulses"],
            [
                _TWO_S,
                _RECTANGLE,
                entropy % "false" + "\n      as: bits",
                entropy % "true" + "\n      as: normalised",
                _TABLE,
            ],
        ),
    }


def _filter_chains() -> dict[str, tuple[Sequence[str], Sequence[str]]]:
    # Bands above a filter's cut-off are refused, rightly: the averaged spectra have them.
    measured = [_TEN_S, _HANN, *_AVERAGE_TABLE]
    tones = list(filter_tones())
    chains: dict[str, tuple[Sequence[str], Sequence[str]]] = {
        "unfiltered": ([*tones, "steady"], measured)
    }

    def low_pass(order: int, passes: str, cutoff_at: str) -> str:
        return (
            f"filter.butterworth: {{low_pass: {CUTOFF_HZ} Hz, order_per_pass: {order}, "
            f'passes: {passes}, cutoff_at: "{cutoff_at}"}}'
        )

    for order in ORDERS:
        steps = [low_pass(order, "forward", "-3 dB"), *measured]
        chains[f"forward_{order}"] = (["cutoff", "octave"], steps)
    for order in (1, 2, 4):
        steps = [low_pass(order, "both_ways", "-6 dB"), *measured]
        chains[f"twice_{order}"] = (["cutoff", f"half_{order}"], steps)
        chains[f"corrected_{order}"] = (
            ["cutoff"],
            [low_pass(order, "both_ways", "-3 dB"), *measured],
        )
    for line in (50, 60):
        steps = [f"filter.notch: {{line: {line} Hz, width: {line / 30} Hz, passes: forward}}"]
        names = [name for name in tones if f"_{line}" in name]
        chains[f"notch_{line}"] = ([*names, "steady"], [*steps, *measured])
    return chains


def _pressure_chains() -> dict[str, tuple[Sequence[str], Sequence[str]]]:
    harmonics = (
        "feature.harmonics: {fundamental_within: [%s Hz, %s Hz], harmonics: %d, trend_below: %s Hz}"
    )
    direct = "feature.band_power: {bands: {mean: [0 Hz, 0.05 Hz], swing: [0.45 Hz, 0.55 Hz]}}"
    return {
        "pulse": (
            [f"pulse_{rate}" for rate in PULSES],
            [
                _TWENTY_S,
                harmonics % (0.7, 3.5, 10, 0.4),
                "spectrum.welch: {segment: 20 s}",
                "feature.spectral_peak: {within: [0.1 Hz, 0.5 Hz], prominence: 3 dB}"
                "\n      as: ventilator",
                _TABLE,
                _AVERAGE,
            ],
        ),
        "standard": (
            ["half_rectified", "square", "triangle"],
            [_TEN_S, harmonics % (0.7, 1.5, 5, 0), _TABLE],
        ),
        "units": (list(OTHER_UNITS), [_TEN_S, _RECTANGLE, direct, _TABLE]),
        "converter": (["zero", "one", "limits"], [_TEN_S, _RECTANGLE, direct, _TABLE]),
    }
