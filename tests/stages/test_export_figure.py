import io
import warnings
from collections.abc import Sequence
from dataclasses import replace
from itertools import combinations

import matplotlib
import numpy as np
import pytest
from hypothesis import example, given
from hypothesis import strategies as st
from matplotlib.backend_bases import RendererBase
from matplotlib.text import Text
from PIL import Image

from feature_data import Collected, some_rows, spectra, spectra_spec
from waveassay.contract import Figure, Kind, Spectra, Whole
from waveassay_stages.export._conditions import stretches
from waveassay_stages.export._draw import fitted, shortened
from waveassay_stages.export._raster import colour_limits, rastered
from waveassay_stages.export._rows import MOST_BINS, collect_rows, joined
from waveassay_stages.export._spectrogram import time_unit
from waveassay_stages.export._spectrum import confidence_band, level_limits
from waveassay_stages.export.figure import STAGE, FigureParams, spec


def params(show: str = "spectrogram", **given: object) -> FigureParams:
    return FigureParams.model_validate({"show": show, **given})


def figure(chosen: FigureParams, parts: Sequence[Spectra]) -> Figure:
    assert isinstance(STAGE.context, Whole)
    made = STAGE.context.combine(chosen, [STAGE.context.collect(chosen, part) for part in parts])
    assert isinstance(made, Figure)
    return made


def noise(rows: int, **given: object) -> Spectra:
    density = np.random.default_rng(1).gamma(3.0, size=(rows, 257)) / (1 + np.arange(257))
    return spectra(density, **given)  # type: ignore[arg-type]


def image(png: bytes) -> np.ndarray[tuple[int, ...], np.dtype[np.uint8]]:
    with Image.open(io.BytesIO(png)) as picture:
        return np.asarray(picture.convert("RGB"))


@pytest.mark.parametrize("show", ["spectrum", "spectrogram"])
def test_the_same_spectra_give_the_same_bytes_whatever_the_stretches_and_settings(
    show: str,
) -> None:
    kept = [True] * 12
    kept[4] = False
    condition = ["rest"] * 5 + ["maintenance"] * 7
    data = noise(12, kept=kept, condition=condition)
    whole = figure(params(show), [data]).png
    with matplotlib.rc_context({"font.size": 20, "axes.facecolor": "red", "text.usetex": True}):
        parts = [some_rows(data, slice(0, 3)), some_rows(data, slice(3, 12))]
        assert figure(params(show), parts).png == whole
    assert image(whole).shape == (800, 1600, 3)
    assert b"Software" not in whole


def test_what_each_takes() -> None:
    assert STAGE.kinds_taken(params("spectrum")) == (Kind.AVERAGES,)
    assert STAGE.kinds_taken(params("spectrogram")) == (Kind.SPECTRA,)


@pytest.mark.parametrize("show", ["spectrum", "spectrogram"])
@pytest.mark.parametrize("rows", [0, 1, 3])
def test_nothing_kept_gives_a_picture_that_says_so(show: str, rows: int) -> None:
    made = figure(params(show), [noise(rows, kept=[False] * rows)])
    assert made.png.startswith(b"\x89PNG")
    assert "kept" in made.caption or "No epochs" in made.caption


def test_captions_name_unit_reference_and_what_was_kept() -> None:
    gram = figure(params(), [noise(4, kept=[True, False, True, True])])
    assert "dB re 1 µV²/Hz" in gram.caption
    assert "3 of 4 epochs kept" in gram.caption
    assert (gram.signal, gram.show) == ("frontal", "spectrogram")
    line = figure(params("spectrum", confidence="90 %"), [noise(2, unit="mmHg")])
    assert "dB re 1 mmHg²/Hz" in line.caption
    assert "90 %" in line.caption


def test_a_raster_shows_each_epoch_in_its_own_time_and_leaves_gaps_blank() -> None:
    density = np.repeat(np.array([1.0, 10.0, 100.0, 1000.0])[:, None], 5, axis=1)
    data = spectra(density, kept=[True, True, False, True], start_s=[0.0, 4.0, 8.0, 20.0])
    raster = rastered(joined([collect_rows(data, None)]), columns=48)  # half a second each
    level = raster.level_db[:, 0]
    assert (raster.border_s[0], raster.border_s[-1]) == (0.0, 24.0)
    np.testing.assert_allclose(level[:8], 0.0, atol=1e-5)
    np.testing.assert_allclose(level[8:16], 10.0, rtol=1e-6)
    assert np.isnan(level[16:40]).all()
    np.testing.assert_allclose(level[40:], 30.0, rtol=1e-6)
    assert np.flatnonzero(raster.excluded).tolist() == list(range(16, 24))


def test_overlapping_epochs_share_their_time_half_way() -> None:
    density = np.array([[1.0] * 5, [10.0] * 5])
    data = spectra(density, start_s=[0.0, 2.0])
    level = rastered(joined([collect_rows(data, None)]), columns=12).level_db[:, 0]
    np.testing.assert_allclose(level, [0.0] * 6 + [10.0] * 6, atol=1e-5)


def test_where_epochs_are_denser_than_columns_the_mean_power_of_those_kept_is_shown() -> None:
    density = np.repeat(np.array([1.0, 3.0, 99.0, 5.0, 5.0, 5.0, 7.0, 9.0])[:, None], 5, axis=1)
    kept = [True, True, False, True, False, False, False, False]
    raster = rastered(joined([collect_rows(spectra(density, kept=kept), None)]), columns=2)
    assert raster.level_db[0, 0] == pytest.approx(10 * np.log10((1 + 3 + 5) / 3), rel=1e-6)
    assert raster.excluded.tolist() == [False, True]


def test_excluded_time_is_drawn_hatched_and_gaps_are_white() -> None:
    data = noise(30, kept=[not 10 <= i < 20 for i in range(30)])
    start = np.where(np.arange(30) < 20, np.arange(30), np.arange(30) + 20) * 4.0
    data = spectra(data.density, kept=data.rows.kept, start_s=start)
    pixels = image(figure(params(), [data]).png).astype(int)
    line = pixels[400, 140:1380]  # across the axes, half-way up
    grey = (np.ptp(line, axis=-1) == 0) & (line[:, 0] > 150)
    white = line[:, 0] == 255
    assert 0.15 < np.mean(grey & ~white) < 0.25  # ten of fifty epochs' lengths
    assert 0.35 < np.mean(white & grey) < 0.45  # twenty
    assert 0.35 < np.mean(~grey) < 0.45  # twenty, in colour


def test_a_range_cuts_frequencies_and_many_lines_are_averaged_in_groups() -> None:
    data = noise(2)
    cut = joined([collect_rows(data, (8.0, 13.0))])
    assert (cut.freq_hz[0], cut.freq_hz[-1]) == (8.0, 13.0)
    np.testing.assert_allclose(
        cut.level_db, 10 * np.log10(data.density[:, 32:53]), rtol=1e-5, atol=1e-5
    )
    fine = spectra(np.tile([1.0, 3.0], 2000)[None], 0.01)
    grouped = joined([collect_rows(fine, None)])
    assert grouped.freq_hz.size <= MOST_BINS
    np.testing.assert_allclose(grouped.level_db, 10 * np.log10(2.0), rtol=1e-5)


def test_stretches_of_a_condition_end_at_gaps_and_overlaps_are_kept() -> None:
    data = spectra(
        np.ones((6, 5)),
        condition=["rest", "rest", "pulse", "rest", "pulse", "rest"],
        start_s=[0.0, 2.0, 2.0, 4.0, 6.0, 60.0],
    )
    found = stretches(joined([collect_rows(data, None)]))
    assert [(s.condition, s.start_s, s.stop_s) for s in found] == [
        ("rest", 0.0, 8.0),
        ("pulse", 2.0, 10.0),
        ("rest", 60.0, 64.0),
    ]


def test_limits_hold_what_they_say() -> None:
    levels = np.random.default_rng(0).normal(0, 5, (100, 50)).astype(np.float32)
    levels[3] = np.nan
    low, high = colour_limits(levels)
    finite = levels[np.isfinite(levels)]
    assert np.mean(finite < low) <= 0.02
    assert np.mean(finite > high) <= 0.01
    assert (low % 1, high % 1) == (0.0, 0.0)
    low, high = level_limits(finite.astype(np.float64))
    assert np.mean(finite < low) <= 0.02
    assert finite.max() < high
    assert colour_limits(np.full((2, 2), 3.0, np.float32)) == (3.0, 4.0)


def test_the_confidence_band_is_that_of_chi_square() -> None:
    # 10 degrees of freedom: handbook percentiles of chi-square are 3.247 and 20.483.
    lower, upper = confidence_band(np.array([0.0]), 10.0, 0.95)
    assert lower[0] == pytest.approx(10 * np.log10(10 / 20.483), abs=1e-3)
    assert upper[0] == pytest.approx(10 * np.log10(10 / 3.247), abs=1e-3)
    assert np.isnan(confidence_band(np.array([0.0]), 0.0, 0.95)).all()


@pytest.mark.parametrize(
    ("length_s", "unit"), [(90.0, "s"), (600.0, "min"), (3 * 3600.0, "min"), (8 * 3600.0, "h")]
)
def test_time_is_shown_in_a_unit_that_fits(length_s: float, unit: str) -> None:
    assert time_unit(length_s)[0] == unit


@pytest.mark.parametrize("show", ["spectrum", "spectrogram"])
def test_odd_names_units_and_levels_do_not_stop_a_figure(show: str) -> None:
    data = noise(9, condition=[f"$x_{i}$ 手术 and so on and on" for i in range(9)], unit="m/s")
    density = data.density.copy()
    density[:, 0] = 0.0  # no power at 0 Hz: no decibels
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        for within in (None, ("0 Hz", "0.5 Hz")):
            made = figure(params(show, within=within), [spectra(density, unit="m/s")])
            assert made.png.startswith(b"\x89PNG")
        assert figure(params(show), [data]).png.startswith(b"\x89PNG")


@pytest.mark.parametrize(
    ("given", "at"),
    [
        ({"within": ("30 Hz", "10 Hz")}, "within"),
        ({"within": ("0 Hz", "70 Hz")}, "within"),
        ({"within": ("8 Hz", "8.3 Hz")}, "within"),
        ({"range": ("10 dB", "-10 dB")}, "range"),
    ],
)
def test_unsound_ranges_are_refused_at_their_place(given: dict[str, object], at: str) -> None:
    found = Collected()
    spec(params(**given), spectra_spec(), found.findings)  # type: ignore[arg-type]
    assert found.refused_at == [at]


def test_what_lies_outside_a_filter_may_be_shown() -> None:
    found = Collected()
    spec(params(within=("0 Hz", "60 Hz")), spectra_spec(pass_hz=(0.5, 40.0)), found.findings)
    assert not found.refused


LONG = "LEFT FRONTAL EEG (Fp1) and a very long name that goes on, as some do, the second time"
EPOCHS = np.arange(40)
CROWDED: dict[str, tuple[dict[str, object], dict[str, object]]] = {
    "long names": ({}, {"condition": [f"{LONG} {i // 20}" for i in EPOCHS]}),
    "ten conditions": ({}, {"condition": [f"CONDITION {i // 4}" for i in EPOCHS]}),
    "forty conditions": ({}, {"condition": [f"stimulus {i}" for i in EPOCHS]}),
    "overlapping conditions": (
        {},
        {"condition": [*"abcdefgh"] * 5, "start_s": (EPOCHS // 8) * 4.0},
    ),
    "late start": ({}, {"start_s": EPOCHS * 4.0 + 1e7}),
    "narrow range": ({"within": ("8 Hz", "8.5 Hz"), "range": ("-10.05 dB", "-10.01 dB")}, {}),
    "wide range": ({"range": ("-5000 dB", "5000 dB")}, {}),
    "one epoch in two excluded": ({}, {"kept": EPOCHS % 2 == 0}),
    "nothing kept": ({}, {"kept": [False] * 40}),
}


def written(
    monkeypatch: pytest.MonkeyPatch, chosen: FigureParams, data: Spectra
) -> list[tuple[str, tuple[float, ...]]]:
    """Return what is written in a figure, and its left, bottom, right and top in pixels."""
    seen: list[tuple[str, tuple[float, ...]]] = []
    draw = Text.draw

    def look(text: Text, renderer: RendererBase) -> None:
        draw(text, renderer)
        if text.get_visible() and text.get_text():
            box = text.get_window_extent(renderer)
            seen.append((text.get_text(), (box.x0, box.y0, box.x1, box.y1)))

    monkeypatch.setattr(Text, "draw", look)
    figure(chosen, [data])
    return seen


@pytest.mark.parametrize("show", ["spectrum", "spectrogram"])
@pytest.mark.parametrize("case", CROWDED)
def test_no_text_covers_another_or_leaves_the_picture(
    show: str, case: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    chosen, of_rows = CROWDED[case]
    data = replace(noise(40, **of_rows), signal=LONG)
    boxes = written(monkeypatch, params(show, **chosen), data)
    assert len(boxes) > 1
    for name, (left, bottom, right, top) in boxes:
        assert 0 <= left < right <= 1600, name
        assert 0 <= bottom < top <= 800, name
    for (one, a), (other, b) in combinations(boxes, 2):
        apart = a[2] <= b[0] or b[2] <= a[0] or a[3] <= b[1] or b[3] <= a[1]
        assert apart, f"{one} covers {other}"


def test_times_far_from_the_start_are_written_in_full(monkeypatch: pytest.MonkeyPatch) -> None:
    late = noise(40, start_s=EPOCHS * 4.0 + 1e7)
    seen = [text for text, _ in written(monkeypatch, params(), late)]
    assert "10000050" in seen
    assert not [text for text in seen if "e+" in text or "+1" in text or "1e" in text]


def test_very_many_names_end_in_how_many_more_there_are(monkeypatch: pytest.MonkeyPatch) -> None:
    data = noise(40, condition=[f"stimulus {i}" for i in EPOCHS])
    seen = [text for text, _ in written(monkeypatch, params("spectrum"), data)]
    named = [text for text in seen if text.startswith("stimulus")]
    assert len(named) >= 20
    assert f"and {40 - len(named)} more" in seen


@given(text=st.text("abW gé", max_size=60), room=st.integers(0, 400))
@example(text="  WWWWW", room=63)  # begins with as many spaces as characters are kept
def test_a_text_is_cut_to_its_room_and_keeps_its_start_and_end(text: str, room: int) -> None:
    cut, text = fitted(text, room, 10), text.strip()
    if cut and cut != text:
        assert len(cut) < len(text)
        start, end = cut.split("…")
        assert start
        assert text.startswith(start)
        assert text.endswith(end)


def test_names_that_differ_at_their_end_still_differ_when_cut() -> None:
    cut = {shortened(f"level of the drug, step {step}", 12) for step in range(10)}
    assert len(cut) == 10
    assert {len(text) for text in cut} <= {11, 12}  # a space before the ellipsis goes


def test_a_level_stands_at_its_place_and_in_the_colour_of_the_bar() -> None:
    # A line every 4 Hz, of which that at 20 Hz stands 20 dB over the rest in the second half.
    density = np.ones((10, 17))
    density[5:, 5] = 100.0
    pixels = image(figure(params(range=("0 dB", "20 dB")), [spectra(density, 4.0)]).png).astype(int)
    top, bottom = matplotlib.colormaps["viridis"]([1.0, 0.0], bytes=True)[:, :3].astype(int)
    bright = np.argwhere((pixels[:, :1390] == top).all(axis=-1))
    dark = np.argwhere((pixels[:, :1390] == bottom).all(axis=-1))
    (upper, left), (lower, right) = dark.min(axis=0), dark.max(axis=0)
    pixel_hz = 66 / (lower - upper + 1)  # the axes reach from 0 to half a line above 64 Hz
    assert bright[:, 1].min() == pytest.approx((left + right + 1) / 2, abs=2)
    assert bright[:, 1].max() == right
    assert (lower + 1 - bright[:, 0].max()) * pixel_hz == pytest.approx(18, abs=0.3)
    assert (lower + 1 - bright[:, 0].min()) * pixel_hz == pytest.approx(22, abs=0.3)
