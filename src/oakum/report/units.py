"""Numbers as people read them."""

RATE_FROM = 64_000_000

_PREFIXES = ("", "k", "M", "G", "T", "P", "E")


def counted(number: int, noun: str, plural: str | None = None) -> str:
    """`1 block`, `1,024 blocks`."""
    return f"{number:,} {noun if number == 1 else plural or noun + 's'}"


def size(nbytes: float) -> str:
    """Bytes with a decimal prefix and three digits: `999 B`, `4.10 GB`."""
    value, step = float(nbytes), 0
    # 999.5 and more would be shown as 1000, so it already goes to the next prefix
    while value >= 999.5 and step < len(_PREFIXES) - 1:
        value, step = value / 1000, step + 1
    if step == 0:
        return f"{value:.0f} B"
    digits = 2 if value < 9.995 else 1 if value < 99.95 else 0
    return f"{value:.{digits}f} {_PREFIXES[step]}B"


def exact_size(nbytes: int) -> str:
    """`4.10 GB (4,096,000,000 bytes)`; small sizes only in bytes."""
    if nbytes < 1000:
        return counted(nbytes, "byte")
    return f"{size(nbytes)} ({nbytes:,} bytes)"


def percent(fraction: float, digits: int = 0) -> str:
    """`61 %`. Never rounded up to 100 % nor down to 0 % when it is neither."""
    shown = f"{fraction * 100:.{digits}f}"
    least = 10.0**-digits
    if fraction < 1 and float(shown) >= 100:
        shown = f"{100 - least:.{digits}f}"
    elif fraction > 0 and float(shown) <= 0:
        return f"under {least:.{digits}f} %"
    return f"{shown} %"


def duration(seconds: float) -> str:
    """`0.4 s`, `12 s`, `3 min 5 s`, `2 h 14 min`."""
    if seconds < 9.95:
        return f"{seconds:.1f} s"
    whole = round(seconds)
    if whole < 60:
        return f"{whole} s"
    if whole < 3600:
        return f"{whole // 60} min {whole % 60} s"
    return f"{whole // 3600} h {whole % 3600 // 60} min"


def speed(nbytes: float, seconds: float) -> str:
    """`812 MB/s`; empty where there is nothing to divide."""
    return f"{size(nbytes / seconds)}/s" if nbytes > 0 and seconds > 0 else ""


def took(nbytes: float, seconds: float) -> str:
    """`It took 12 s, 812 MB/s.` Small work has no rate: most of its time is not spent on bytes."""
    rate = f", {speed(nbytes, seconds)}" if nbytes >= RATE_FROM and seconds > 0 else ""
    return f"It took {duration(seconds)}{rate}."
