"""Gathers the measured curves into the package, for plan: python tests/benchmarks/package_curves.py

From `curves.json` (the codes that are recommended, blocks of full width) and `rehearsals.json` (short codes).
Rates at which fewer than `LEAST` blocks were measured are left out: they say too little to plan with.
"""

from __future__ import annotations

import json
from pathlib import Path

from oakum.algebra.naming import resolve_code

HERE = Path(__file__).parent
PACKAGED = HERE.parents[1] / "src" / "oakum" / "data" / "curves.json"

LEAST = 20


def gathered() -> str:
    """The contents of the package's table: by notation, curves with width and (rate, blocks, blocks lost)."""
    counts: dict[tuple[str, int], dict[float, list[int]]] = {}
    for point in json.loads((HERE / "curves.json").read_text())["points"]:
        curve = counts.setdefault((resolve_code(point["code"]).notation, point["width"]), {})
        total = curve.setdefault(point["rate"], [0, 0])
        total[0] += len(point["lost"])
        total[1] += sum(columns > 0 for columns in point["lost"])
    rehearsals = HERE / "rehearsals.json"
    for name, stored in json.loads(rehearsals.read_text()).items() if rehearsals.exists() else ():
        curve = counts.setdefault((resolve_code(name).notation, stored["width"]), {})
        curve.update({rate: [blocks, lost] for rate, blocks, lost in stored["points"]})
    table: dict[str, list[dict[str, object]]] = {}
    for (notation, width), curve in sorted(counts.items()):
        points = [[rate, *curve[rate]] for rate in sorted(curve) if curve[rate][0] >= LEAST]
        if points:
            table.setdefault(notation, []).append({"width": width, "points": points})
    return json.dumps(table, indent=1) + "\n"


if __name__ == "__main__":
    PACKAGED.write_text(gathered(), encoding="ascii")
