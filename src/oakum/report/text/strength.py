"""What a code promises, in words."""

from oakum.report.terminal import safe
from oakum.report.units import exact_size
from oakum.results import CodeSummary


def strength(code: CodeSummary, guaranteed_burst: int, windows: int) -> str:
    """Two sentences: which code, and the damage that it puts right in any case."""
    flips = f"any {code.guaranteed_flips} flipped bits in a codeword, wherever they are"
    if guaranteed_burst:
        within = "in each window" if windows > 1 else "anywhere"
        flips = f"any one lost stretch of up to {exact_size(guaranteed_burst)} {within}, and {flips}"
    return f"The code is {code_phrase(code)}. It puts right {flips}."


def code_phrase(code: CodeSummary) -> str:
    """`shelf, RS(255,223) with the inner code [128,120,4]`."""
    outer = "RS({},{})".format(*code.outer)
    inner = "" if code.inner is None else " with the inner code [{},{},{}]".format(*code.inner)
    name = "" if code.name.startswith("RS(") else f"{safe(code.name)}, "
    return f"{name}{outer}{inner}"
