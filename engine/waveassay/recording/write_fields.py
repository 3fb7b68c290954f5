"""Numbers and texts as the header of a recording holds them."""

from decimal import ROUND_CEILING, ROUND_FLOOR, Decimal
from fractions import Fraction
from pathlib import Path

from waveassay.contract.errors import WaveassayError

FIELD = 8  # characters of a number


class WriteError(WaveassayError):
    """The format cannot hold what was to be written."""


def field_text(value: str, width: int, what: str, path: Path) -> bytes:
    """Return a header field, padded; refuse what does not fit or is not printable ASCII."""
    if not all(32 <= ord(character) <= 126 for character in value):
        raise WriteError(f"{path}: {what} '{value}' has characters that are not printable ASCII")
    if len(value) > width:
        raise WriteError(
            f"{path}: {what} '{value}' has {len(value)} characters, but the format holds {width}"
        )
    return value.encode("ascii").ljust(width)


def exact_text(value: Fraction, what: str, path: Path) -> str:
    """Return a number as a finite decimal, in full."""
    value = Fraction(value)
    rest, places = value.denominator, 0
    for factor in (2, 5):
        power = 0
        while rest % factor == 0:
            rest //= factor
            power += 1
        places = max(places, power)
    if rest != 1:
        raise WriteError(f"{path}: {what} = {value} s is no finite decimal, so no text is exact")
    whole, part = divmod(abs(value.numerator) * 10**places // value.denominator, 10**places)
    text = f"{whole}.{part:0{places}d}" if places else str(whole)
    return f"-{text}" if value < 0 else text


def limit_text(value: float, *, up: bool, what: str, path: Path) -> str:
    """Return a number in at most 8 characters, rounded up or down where it has more digits."""
    number = Decimal(repr(float(value)))
    if not number.is_finite() or abs(number) >= 10**FIELD:
        raise WriteError(f"{path}: {what} = {value} does not fit {FIELD} characters")
    for places in range(FIELD - 2, -1, -1):
        step = Decimal(1).scaleb(-places)
        rounded = number.quantize(step, rounding=ROUND_CEILING if up else ROUND_FLOOR)
        text = f"{rounded:f}"
        if "." in text:
            text = text.rstrip("0").rstrip(".")
        if text in ("-0", ""):
            text = "0"
        if len(text) <= FIELD:
            return text
    raise WriteError(f"{path}: {what} = {value} does not fit {FIELD} characters; use another unit")
