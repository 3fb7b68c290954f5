"""The example is what its script writes, is small and names nobody."""

import filecmp
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from waveassay.contract.errors import RefusedError
from waveassay.example import write_example
from waveassay.example.signals import Course, falling, hill, noise, uniform
from waveassay.recipe import check_recipe
from waveassay.recording import open_recording, read_facts

COMMITTED = Path(__file__).parents[1] / "workdir_example"


def files_of(folder: Path) -> list[str]:
    """Return the example's own files below a folder, sorted; a run leaves others there."""
    return sorted(
        path.relative_to(folder).as_posix()
        for path in folder.rglob("*")
        if path.is_file() and path.relative_to(folder).parts[0] not in ("runs", "store")
    )


@pytest.fixture(scope="module")
def written(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("example") / "new"
    write_example(folder)
    return folder


def test_the_committed_folder_is_what_the_script_writes(written: Path) -> None:
    """Where sines are rounded otherwise, a sample in a million may differ by one digital step."""
    assert files_of(COMMITTED) == files_of(written)
    for name in files_of(written):
        if filecmp.cmp(COMMITTED / name, written / name, shallow=False):
            continue
        assert name.endswith(".edf"), f"{name} differs: write the example again and commit it"
        old, new = (np.fromfile(folder / name, "<i2") for folder in (COMMITTED, written))
        assert old.size == new.size, f"{name} has another size: write the example again"
        steps = np.abs(old.astype(np.int64) - new)
        assert steps.max() <= 1, f"{name} differs by {steps.max()} steps: write the example again"
        assert np.mean(steps) < 1e-4, f"{name}: {np.sum(steps)} samples differ by one step"


def test_writing_it_twice_gives_the_same_bytes(written: Path, tmp_path: Path) -> None:
    write_example(tmp_path)  # an empty folder will do
    names = files_of(written)
    assert filecmp.cmpfiles(written, tmp_path, names, shallow=False) == (names, [], [])


def test_it_is_small() -> None:
    sizes = [(COMMITTED / name).stat().st_size for name in files_of(COMMITTED)]
    assert sum(sizes) < 2_000_000


def test_a_folder_that_is_in_use_is_left_alone(tmp_path: Path) -> None:
    (tmp_path / "mine.txt").write_text("mine")
    with pytest.raises(RefusedError, match="already exists"):
        write_example(tmp_path)
    assert [path.name for path in tmp_path.iterdir()] == ["mine.txt"]


def test_no_recording_names_anybody(written: Path) -> None:
    paths = sorted(written.rglob("*.edf"))
    assert len(paths) == 7
    for path in paths:
        header = path.read_bytes()[:256]
        assert header[8:88].strip() == b"X X X X"
        assert header[88:168].strip()[-6:] == b" X X X"


def test_its_recordings_are_sound_and_the_damaged_one_is_not(written: Path) -> None:
    formats = {}
    for path in sorted((written / "recordings").rglob("*.edf")):
        facts = read_facts(path)
        assert facts.warnings == ()
        assert len(facts.signals) == 3
        formats[path.stem] = facts.format
    assert formats == {
        name: "EDF+D" if name == "v02" else "EDF+C"
        for name in ("v01", "v02", "v03", "v04", "v05", "v06")
    }
    with pytest.raises(Exception, match=r"v07\.edf"), open_recording(written / "damaged/v07.edf"):
        pass


@pytest.mark.parametrize(
    "path",
    [COMMITTED / "recipe.yaml", *sorted((Path(__file__).parents[1] / "recipes").glob("*.yaml"))],
    ids=lambda path: path.parent.name + "/" + path.name,
)
def test_its_recipe_and_those_that_ship_are_sound(path: Path) -> None:
    checked = check_recipe(path.read_text(encoding="utf-8"), str(path))
    assert checked.errors == ()
    # The published range from 0.1 Hz in windows of 3 s is what the warning is for.
    expected = 3 if path.name == "spectral-edge.yaml" else 0
    assert len([w for w in checked.warnings if "below one cycle in a window" in w.message]) == (
        expected
    )
    assert len(checked.warnings) == expected


COURSES = st.builds(
    lambda first, second, leaves, width: Course(first, second, leaves, leaves + width),
    st.floats(0.5, 3),
    st.floats(0.5, 3),
    st.floats(0, 100),
    st.floats(1, 100),
)


@given(COURSES, st.floats(0, 300))
def test_the_cycles_gone_through_are_the_integral_of_the_rate(course: Course, until: float) -> None:
    time_s = np.linspace(0, until, 4001)
    rate = course.at(time_s)
    sums = np.sum((rate[1:] + rate[:-1]) / 2 * np.diff(time_s))
    assert course.integral(np.array([until]))[0] == pytest.approx(sums, abs=0.02)


@pytest.mark.parametrize("density", [hill(10.0, 1.25), hill(1.1, 0.6), falling(3.0, 0.3, 55.0)])
def test_noise_has_the_power_of_its_density(density: object) -> None:
    """Parseval: over its period the mean square is the sum of the density over its lines."""
    assert callable(density)
    freq_hz = np.arange(64 * 512 + 1) / 512
    x = noise(density, 128, 128 * 512, (1, 2))
    assert np.mean(x**2) == pytest.approx(np.sum(density(freq_hz)) / 512, rel=1e-9)


def test_a_hill_holds_a_power_of_one() -> None:
    freq_hz = np.arange(20_001) / 1000
    assert np.sum(hill(10.0, 1.25)(freq_hz)) / 1000 == pytest.approx(1, rel=1e-6)


def test_random_numbers_are_spread_evenly_and_differ_by_seed() -> None:
    numbers = uniform((3, 1), 20_000)
    assert 0 <= numbers.min() < 0.001 < 0.999 < numbers.max() < 1
    counts = np.histogram(numbers, 20, (0, 1))[0]
    # Standard deviation of a bin's count: sqrt(20000/20 x 19/20), 31.
    assert np.max(np.abs(counts - 1000)) < 5 * 31
    assert not np.any(numbers[:100] == uniform((3, 2), 100))
