"""What comes out of a chain is known before data are read, signal by signal."""

from fractions import Fraction

from recipe_stages import REGISTRY, with_chain
from waveassay.contract import EpochsSpec, SignalSpec, SinkSpec, SpectraSpec
from waveassay.recipe import Chain, check_recipe, effective_source, fold

READ = "load: {signals: [eeg, artery]}"
CUT = "epoch.cut: {length: 4 s}"
POWER = "feature.power: {bands: {a: [8 Hz, 13 Hz]}}"


def chain(*steps: str) -> Chain:
    recipe = check_recipe(with_chain(*steps), "r", REGISTRY).recipe
    assert recipe is not None
    return recipe.chains["c"]


def signal(name: str = "eeg", rate_hz: int | None = 200) -> SignalSpec:
    return SignalSpec(name, "uV", rate_hz=None if rate_hz is None else Fraction(rate_hz))


def test_specs_follow_the_steps() -> None:
    folded = fold(chain(READ, "filter.smooth: {low_pass: 40 Hz}", CUT, "spectrum.plain"), signal())
    assert folded.findings == ()
    smooth, epochs, spectra = folded.specs[1:]
    assert isinstance(smooth, SignalSpec)
    assert smooth.pass_hz == (None, 40.0)
    assert isinstance(epochs, EpochsSpec)
    assert (epochs.length_s, epochs.step_s) == (4.0, 2.0)
    assert isinstance(spectra, SpectraSpec)
    assert spectra.top_hz == 100.0


def test_what_is_wrong_only_at_this_rate_is_found_with_the_rate() -> None:
    steps = chain(READ, CUT, "spectrum.plain", POWER, "export.table")
    assert fold(steps, signal(rate_hz=None)).findings == ()
    assert fold(steps, signal(rate_hz=200)).findings == ()
    (finding,) = fold(steps, signal(rate_hz=20)).findings
    assert (finding.step_index, finding.at, finding.severity) == (3, "bands.a", "error")
    assert "Nyquist frequency 10 Hz" in finding.message


def test_steps_behind_an_error_are_folded_too() -> None:
    steps = chain(READ, "filter.smooth: {low_pass: 40 Hz}", CUT, "spectrum.plain", POWER)
    found = fold(steps, signal(rate_hz=20)).findings
    assert [(f.step_index, f.at) for f in found] == [(1, "low_pass"), (4, "bands.a")]


def test_a_signal_passes_a_step_that_is_limited_to_others() -> None:
    steps = chain(READ, "{filter.smooth: {low_pass: 40 Hz}, on: eeg}", CUT, "spectrum.plain")
    eeg, artery = (fold(steps, signal(name)).specs for name in ("eeg", "artery"))
    assert all(eeg)
    assert artery[1] is None
    assert isinstance(artery[2], EpochsSpec)
    assert artery[2].signal.pass_hz == (None, None)
    assert isinstance(artery[3], SpectraSpec)
    assert effective_source(steps.steps, 2, "eeg") == 1
    assert effective_source(steps.steps, 2, "artery") == 0


def test_a_signal_does_not_pass_a_step_that_changes_the_kind() -> None:
    steps = chain(READ, f"{{{CUT}, on: eeg}}", "spectrum.plain", "export.figure")
    artery = fold(steps, signal("artery")).specs
    assert artery[1:] == (None, None, None)
    eeg = fold(steps, signal("eeg")).specs
    assert isinstance(eeg[3], SinkSpec)


def test_a_source_gives_only_what_it_reads() -> None:
    steps = chain("load: {signals: [eeg]}", CUT, "load: {signals: [artery]}", CUT)
    eeg, artery = (fold(steps, signal(name)).specs for name in ("eeg", "artery"))
    assert [spec is None for spec in eeg] == [False, False, True, True]
    assert [spec is None for spec in artery] == [True, True, False, False]


def test_one_name_may_stand_for_many_signals() -> None:
    steps = chain(READ, f"{{{CUT}, on: eeg}}")
    assert fold(steps, signal("EEG Fp1"), rule="eeg").specs[1] is not None
    assert fold(steps, signal("EEG Fp1")).specs == (None, None)


def test_a_finding_stands_once_and_names_its_signal_where_not_all_have_it() -> None:
    steps = ("resample: {rate: 30 Hz}", CUT, "spectrum.plain", POWER, "export.table")
    bad = POWER.replace("13", "20")
    both = check_recipe(with_chain(READ, *steps[:3], bad, steps[4]), "r", REGISTRY).problems
    assert [p.message for p in both] == [
        "the band ends at 20 Hz, above the Nyquist frequency 15 Hz"
    ]
    limited = "{resample: {rate: 30 Hz}, on: eeg}"
    one = check_recipe(with_chain(READ, limited, *steps[1:3], bad, steps[4]), "r", REGISTRY)
    assert [p.message for p in one.problems] == [
        "the band ends at 20 Hz, above the Nyquist frequency 15 Hz (signal eeg)"
    ]


def test_faults_before_and_behind_a_broken_step_are_told_together() -> None:
    text = with_chain(
        READ,
        "resample: {rate: 20 Hz}",
        "filter.smooth: {low_pass: 40 Hz}",
        CUT,
        "spectrum.plin",
        "feature.power: {bands: {a: [8 Hz, 13]}}",
    )
    found = check_recipe(text, "r", REGISTRY).problems
    assert [(p.place.line, p.code) for p in found] == [(10, "R309"), (12, "R104"), (13, "R204")]


def test_a_warning_leaves_the_recipe_sound() -> None:
    text = with_chain(READ, "filter.smooth: {low_pass: 40 Hz, careful: true}", CUT, "export.figure")
    text = text.replace("- export.figure", "- spectrum.plain\n    - export.figure")
    checked = check_recipe(text, "r", REGISTRY)
    assert checked.recipe is not None
    assert [str(p) for p in checked.warnings] == [
        "r:9:49: W401 c.filter.smooth.careful: careful is slow"
    ]
