"""Small recordings with random damage, one a seed: fields, annotation bytes, lengths."""

import random

from edf_bytes import Sig, annotation_signal, build, tal

_FIELD_VALUES = (
    *("", "0", "-1", "-2", "1", "2", "3", "4", "7", "16", "255", "256", "512", "99999999"),
    *("1e9", "1e-9", "1e308", "1e-320", "1e999", "1e-9999", "nan", "inf", "0.1", ".5", "5."),
    *("0,5", "+1", "--1", "1 2", "0x10", "1_0", "EDF+C", "EDF+D", "BDF+D", "EDF+", "X", "yy"),
    *("-0", "-32768", "32767", "8388607", "0.033333", "21474836", "4294967", "99.99.99"),
)
_MAIN_WIDTHS = (8, 80, 80, 8, 8, 8, 44, 8, 8, 4)
_SIGNAL_WIDTHS = (16, 80, 8, 8, 8, 8, 8, 80, 8, 32)
_LIST_BYTES = (0, 20, 21, 43, 45, 46, 48, 49, 57, 65, 255)


def mutated(seed: int) -> bytes:
    """Return one damaged file; the same for the same seed."""
    rng = random.Random(seed)
    raw, count = _sound(rng)
    header_bytes = 256 * (count + 1)
    fields = _fields(count)
    for _ in range(rng.choice((1, 1, 1, 2, 3, 6))):
        damage = rng.randrange(8)
        if damage == 0:
            raw[rng.randrange(min(len(raw), header_bytes))] = rng.randrange(256)
        elif damage in (1, 2):
            _put(raw, rng.choice(fields), rng.choice(_FIELD_VALUES).encode())
        elif damage == 3:
            raw = raw[: rng.randrange(257, len(raw) + 1) if len(raw) > 257 else len(raw)]
        elif damage == 4:
            _swap(raw, rng.choice(fields), rng.choice(fields))
        elif damage == 5 and len(raw) > header_bytes:
            first = rng.randrange(header_bytes, len(raw))
            for place in range(first, min(len(raw), first + rng.randrange(1, 60))):
                raw[place] = rng.choice(_LIST_BYTES)
        elif damage == 6 and len(raw) > header_bytes:
            for _ in range(rng.randrange(1, 8)):
                raw[rng.randrange(header_bytes, len(raw))] = rng.choice(_LIST_BYTES)
        elif damage == 7:
            more = rng.choice((count + 1, 50, 640, 9999))
            _put(raw, (252, 4), b"%d" % more)
            _put(raw, (184, 8), b"%d" % (256 * (more + 1)))
            raw += rng.choice((b" ", b"1", b"\0")) * (256 * (more - count) + rng.randrange(3000))
    return bytes(raw)


def _sound(rng: random.Random) -> tuple[bytearray, int]:
    signals = [Sig(f"S{i}", rng.choice((1, 4, 25))) for i in range(rng.randrange(1, 4))]
    bdf = rng.random() < 0.4
    lists = [annotation_signal(60, bdf=bdf) for _ in range(rng.randrange(3))]
    family = "BDF" if bdf else "EDF"
    reserved = f"{family}+{rng.choice('CD')}" if lists else ""
    step = rng.choice(("1", "0.5", "0.033333"))

    def tals(record: int, which: int) -> bytes:
        start = f"+{record * float(step) + 2 * (record > 2):.6f}"
        return (b"" if which else tal(start)) + tal("+1.5", f"event {record}", duration="0.25")

    whole = [*signals, *lists]
    rng.shuffle(whole)
    raw = build(whole, rng.randrange(1, 7), duration=step, bdf=bdf, reserved=reserved, tals=tals)
    return bytearray(raw), len(whole)


def _fields(count: int) -> list[tuple[int, int]]:
    fields = []
    at = 0
    for width in _MAIN_WIDTHS:
        fields.append((at, width))
        at += width
    for width in _SIGNAL_WIDTHS:
        for _ in range(count):
            fields.append((at, width))
            at += width
    return fields


def _put(raw: bytearray, field: tuple[int, int], value: bytes) -> None:
    at, width = field
    raw[at : at + width] = value[:width].ljust(width)


def _swap(raw: bytearray, one: tuple[int, int], two: tuple[int, int]) -> None:
    width = min(one[1], two[1])
    first = raw[one[0] : one[0] + width]
    raw[one[0] : one[0] + width] = raw[two[0] : two[0] + width]
    raw[two[0] : two[0] + width] = first
