"""The example's study. All of it is invented: sites, volunteers, drug and numbers."""

from dataclasses import dataclass
from datetime import datetime

#: Conditions, s from the recording's start; the recipe finds them by the annotations.
CLOSED_S = 8
BASELINE_S = (8, 98)
LEAVES_S, STABLE_S = 105, 160
SETTLED_S = 10  # the recipe waits this long after "stable level"
END_BEFORE_STOP_S = 10

PRESSURE_RATE_HZ = 125
#: Amplitudes of the pulse's harmonics as shares of the first, and phases (cosine, the first at 0).
HARMONICS = (1.0, 0.55, 0.30, 0.14, 0.07, 0.03)
PHASES_DEG = (0.0, -60.0, -100.0, -150.0, 160.0, 110.0)
VENTILATOR_MMHG = 2.0
PRESSURE_NOISE_MMHG = 0.4  # evenly spread within this much of 0

#: Slow waves lie 0.6 Hz around 1.1 Hz, alpha waves 1.25 Hz around their peak.
SLOW_HZ, SLOW_HALF_WIDTH_HZ = 1.1, 0.6
ALPHA_HALF_WIDTH_HZ = 1.25
#: Behind both: a density that falls as 1/f from 0.3 to 55 Hz, in uV^2/Hz at 1 Hz.
BACKGROUND, BACKGROUND_HZ = 3.0, (0.3, 55.0)
MAINS_HZ, MAINS_UV = 50, 600.0


@dataclass(frozen=True)
class Site:
    """Where recordings were made: each site's device writes in its own way."""

    name: str
    rate_hz: int
    left: str
    right: str
    artery: str
    unit: str
    uv_per_unit: int
    limit: float


@dataclass(frozen=True)
class Volunteer:
    """One recording. Pairs are of baseline and sedation.

    Attributes
    ----------
    slow_uv2, alpha_uv2 : mean square of the slow and of the alpha waves, on either side alike.
    pulse_per_min, pulse_mmhg, pressure_mmhg : pulse rate, its first harmonic, mean pressure.
    gap_s : a stretch that was not recorded.
    flat_s, mains_s : when the right electrode was off: first nothing, then mains.
    """

    name: str
    site: Site
    start: datetime
    stop_s: int
    slow_uv2: tuple[float, float]
    alpha_uv2: tuple[float, float]
    alpha_hz: tuple[float, float]
    pulse_per_min: tuple[float, float]
    pulse_mmhg: tuple[float, float]
    pressure_mmhg: tuple[float, float]
    breaths_per_min: int
    gap_s: tuple[int, int] | None = None
    flat_s: tuple[int, int] | None = None
    mains_s: tuple[int, int] | None = None

    @property
    def recording(self) -> str:
        """Its name in tables: the path below the folder of recordings."""
        return f"{self.site.name}/{self.name}"

    @property
    def end_of_level_s(self) -> int:
        """When the level of the drug was given up."""
        return self.stop_s - END_BEFORE_STOP_S

    @property
    def sedation_s(self) -> tuple[int, int]:
        """The condition as the recipe finds it."""
        return STABLE_S + SETTLED_S, self.end_of_level_s


HARBOUR = Site("harbour", 128, "EEG Fp1-F7", "EEG Fp2-F8", "ABP", "uV", 1, 800.0)
HILLSIDE = Site("hillside", 250, "Fp1-F7", "FP2-F8", "ART", "mV", 1000, 0.8)

VOLUNTEERS = (
    Volunteer(
        name="v01",
        site=HARBOUR,
        start=datetime(2031, 3, 4, 9, 12, 0),
        stop_s=270,
        slow_uv2=(30.0, 300.0),
        alpha_uv2=(12.0, 75.0),
        alpha_hz=(10.0, 10.5),
        pulse_per_min=(72.0, 63.0),
        pulse_mmhg=(18.0, 14.0),
        pressure_mmhg=(92.0, 74.0),
        breaths_per_min=12,
    ),
    Volunteer(
        name="v02",
        site=HARBOUR,
        start=datetime(2031, 3, 5, 13, 40, 30),
        stop_s=285,
        slow_uv2=(25.0, 160.0),
        alpha_uv2=(10.0, 60.0),
        alpha_hz=(9.5, 10.0),
        pulse_per_min=(66.0, 60.0),
        pulse_mmhg=(20.0, 16.0),
        pressure_mmhg=(88.0, 70.0),
        breaths_per_min=12,
        gap_s=(200, 215),
    ),
    Volunteer(
        name="v03",
        site=HARBOUR,
        start=datetime(2031, 3, 11, 23, 58, 0, 390625),
        stop_s=270,
        slow_uv2=(35.0, 220.0),
        alpha_uv2=(15.0, 48.0),
        alpha_hz=(10.5, 11.0),
        pulse_per_min=(84.0, 72.0),
        pulse_mmhg=(16.0, 13.0),
        pressure_mmhg=(95.0, 80.0),
        breaths_per_min=15,
    ),
    Volunteer(
        name="v04",
        site=HILLSIDE,
        start=datetime(2031, 4, 1, 8, 30, 15),
        stop_s=270,
        slow_uv2=(28.0, 280.0),
        alpha_uv2=(8.0, 64.0),
        alpha_hz=(9.0, 9.5),
        pulse_per_min=(70.0, 66.0),
        pulse_mmhg=(22.0, 17.0),
        pressure_mmhg=(90.0, 76.0),
        breaths_per_min=12,
    ),
    Volunteer(
        name="v05",
        site=HILLSIDE,
        start=datetime(2031, 4, 2, 10, 5, 0),
        stop_s=270,
        slow_uv2=(32.0, 200.0),
        alpha_uv2=(14.0, 70.0),
        alpha_hz=(10.0, 10.0),
        pulse_per_min=(60.0, 54.0),
        pulse_mmhg=(19.0, 15.0),
        pressure_mmhg=(86.0, 72.0),
        breaths_per_min=14,
        flat_s=(180, 192),
        mains_s=(192, 204),
    ),
    Volunteer(
        name="v06",
        site=HILLSIDE,
        start=datetime(2031, 4, 9, 15, 20, 0),
        stop_s=270,
        slow_uv2=(26.0, 104.0),
        alpha_uv2=(11.0, 33.0),
        alpha_hz=(11.0, 11.5),
        pulse_per_min=(78.0, 69.0),
        pulse_mmhg=(17.0, 15.0),
        pressure_mmhg=(94.0, 82.0),
        breaths_per_min=12,
    ),
)
