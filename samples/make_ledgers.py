"""Writes the tide ledgers of Quernhaven, a harbour that does not exist.

    python samples/make_ledgers.py FOLDER

The ledgers are what an archive might hold of a gauge that was kept for one year: twelve monthly tables of
hourly readings, the keepers' notes, and a scanned-looking sheet of the gauge's pen. The seed is fixed and
only the standard library is used, so the same bytes come out every time; the folder `quernhaven` beside
this script was written by it, and a test compares.
"""

import math
import random
import sys
from collections.abc import Iterator
from datetime import datetime, timedelta
from pathlib import Path

SEED = 18_790_214
FIRST_HOUR = datetime(1911, 1, 1)
HOURS = 365 * 24
MEAN_LEVEL_CM = 412.0

# Tidal constituents: name, degrees an hour (the speeds are those of any tide table), and the amplitude
# in centimetres and phase in degrees that we gave this harbour.
CONSTITUENTS = (
    ("M2", 28.9841042, 168.0, 141.0),
    ("S2", 30.0000000, 57.0, 183.0),
    ("N2", 28.4397295, 33.0, 119.0),
    ("K1", 15.0410686, 11.0, 77.0),
    ("O1", 13.9430356, 9.0, 324.0),
    ("M4", 57.9682084, 6.5, 20.0),
)

REMARKS = (
    "Float chain cleared of weed.",
    "Ink thickened in the night, pen slow between two and four.",
    "Clock found three minutes fast and set back.",
    "Sheet changed late, the morning readings taken from the staff.",
    "Heavy swell in the basin, the trace a broad band.",
    "Fog. Staff read by lantern.",
    "Dredger at the north quay, gauge well muddied.",
    "Gale from the south-west; the water stood well above the table all day.",
    "Calm and clear. Nothing to remark.",
    "Visitors from the school counted the steps of the staff and agreed with us.",
    "Pencil used until noon for want of ink.",
)
KEEPERS = ("first keeper", "second keeper", "relief keeper")


def main() -> None:
    """Writes the ledgers into the folder that the command line names."""
    if len(sys.argv) != 2:
        sys.exit("usage: python make_ledgers.py FOLDER")
    write_ledgers(Path(sys.argv[1]))


def write_ledgers(folder: Path) -> None:
    """Writes every file of the sample under `folder`, which is made if need be."""
    chance = random.Random(SEED)
    readings = list(gauge_readings(chance))
    for name in ("readings", "notes", "sheets"):
        (folder / name).mkdir(parents=True, exist_ok=True)
    for month in range(1, 13):
        of_month = [(when, level, remark) for when, level, remark in readings if when.month == month]
        stem = f"1911-{month:02d}"
        (folder / "readings" / f"{stem}.csv").write_bytes(table(of_month))
        (folder / "notes" / f"{stem}.txt").write_bytes(notes(of_month, chance))
    for month in (3, 9):  # the two sheets that survived: the equinoxes, when the range is largest
        levels = [level for when, level, _ in readings if when.month == month][: 14 * 24]
        (folder / "sheets" / f"1911-{month:02d}.pgm").write_bytes(pen_sheet(levels, chance))


def gauge_readings(chance: random.Random) -> Iterator[tuple[datetime, int, str]]:
    """Hour, level in centimetres over the staff's zero, and how the reading was taken."""
    surge = 0.0
    for hour in range(HOURS):
        surge = 0.97 * surge + chance.uniform(-4.0, 4.0)  # weather comes and goes within days
        tide = sum(
            amplitude * math.cos(math.radians(speed * hour - phase))
            for _, speed, amplitude, phase in CONSTITUENTS
        )
        taken = "staff" if chance.random() < 0.02 else "float"
        yield FIRST_HOUR + timedelta(hours=hour), round(MEAN_LEVEL_CM + tide + surge), taken


def table(readings: list[tuple[datetime, int, str]]) -> bytes:
    """One month as CSV."""
    lines = ["date,hour,level_cm,taken_from"]
    lines += [f"{when:%Y-%m-%d},{when:%H}:00,{level},{taken}" for when, level, taken in readings]
    return ("\n".join(lines) + "\n").encode()


def notes(readings: list[tuple[datetime, int, str]], chance: random.Random) -> bytes:
    """The keepers' notes of one month: a line a day, with the day's highest and lowest water."""
    month = readings[0][0]
    lines = [f"QUERNHAVEN TIDE GAUGE. Keepers' notes, {month:%m}/{month:%Y}.", ""]
    for first in range(0, len(readings), 24):
        day = readings[first : first + 24]
        high, low = max(day, key=lambda r: r[1]), min(day, key=lambda r: r[1])
        lines.append(
            f"{day[0][0]:%d}.  High {high[1]} at {high[0]:%H}h, low {low[1]} at {low[0]:%H}h. "
            f"{chance.choice(REMARKS)} ({chance.choice(KEEPERS)})"
        )
    return ("\n".join(lines) + "\n").encode()


def pen_sheet(levels: list[int], chance: random.Random) -> bytes:
    """The gauge's paper as if scanned, a binary grey map (PGM): ruled paper, grain, stains, a pen trace."""
    width, height = 336, 200
    paper = [[228 + chance.randrange(-9, 10) for _ in range(width)] for _ in range(height)]
    for y in range(height):
        for x in range(width):
            ruled = y % 20 == 0 or x % 24 == 0
            paper[y][x] -= (34 if ruled else 0) + 22 * abs(2 * x - width) ** 3 // width**3
    for _ in range(5):
        stain(paper, chance.randrange(width), chance.randrange(height), chance.randrange(6, 18))
    trace(paper, levels)
    header = f"P5\n# Quernhaven tide gauge, one fortnight\n{width} {height}\n255\n".encode()
    return header + bytes(max(0, min(255, grey)) for row in paper for grey in row)


def stain(paper: list[list[int]], across: int, down: int, radius: int) -> None:
    """Darkens a round patch, its rim most, as a drop of water does."""
    for y in range(max(0, down - radius), min(len(paper), down + radius + 1)):
        for x in range(max(0, across - radius), min(len(paper[0]), across + radius + 1)):
            distance = (x - across) ** 2 + (y - down) ** 2
            if distance <= radius * radius:
                paper[y][x] -= 26 if distance > (radius - 2) ** 2 else 9


def trace(paper: list[list[int]], levels: list[int]) -> None:
    """Draws the levels as an unbroken line, one column an hour, 800 cm over the sheet's height."""
    height = len(paper)
    rows = [height - 1 - max(0, min(height - 1, level * height // 800)) for level in levels]
    for x, (here, before) in enumerate(zip(rows, [rows[0], *rows], strict=False)):
        for y in range(min(here, before), max(here, before) + 1):
            paper[y][x] = 46


if __name__ == "__main__":
    main()
