"""Codes by name and by the notation of the literature."""

from __future__ import annotations

import re

from oakum.algebra.concatenated import ConcatenatedCode
from oakum.algebra.inner import EXTENDED_BCH, EXTENDED_HAMMING, InnerCode
from oakum.algebra.outer import OuterCode
from oakum.errors import UsageError

DEFAULT = "shelf"

NAMED: dict[str, ConcatenatedCode] = {
    code.name: code
    for code in (
        ConcatenatedCode("slim", OuterCode(255, 239), InnerCode(EXTENDED_HAMMING, 15, 1)),
        ConcatenatedCode("shelf", OuterCode(255, 223), InnerCode(EXTENDED_HAMMING, 15, 1)),
        ConcatenatedCode("stout", OuterCode(255, 207), InnerCode(EXTENDED_BCH, 14, 2)),
        ConcatenatedCode("plain", OuterCode(255, 223), InnerCode.none()),
    )
}

_PARAMETERS = r"[(\[] (\d{1,4}) , (\d{1,4}) (?: , (\d{1,4}) )? [)\]]".replace(" ", r"\s*")
_NOTATION = re.compile(
    rf"\s*RS\s*{_PARAMETERS}\s*(?:\+\s*(?P<family>E[HB])?\s*{_PARAMETERS}\s*)?", re.ASCII | re.IGNORECASE
)


def resolve_code(text: str) -> ConcatenatedCode:
    """The code that `text` means: a name, or a notation such as "RS(255,239)+EB(128,112)" or "RS(255,223)".

    Blanks and case do not matter, brackets may be square, a third number is the distance and must be the true
    one, and the inner code's family may be left out, as in "RS(255,223)+[128,120,4]". A notation that means a
    named code gives the named one. Raises `UsageError` for anything else.
    """
    name = text.strip().lower()
    if name in NAMED:
        return NAMED[name]
    match = _NOTATION.fullmatch(text)
    if match is None:
        raise UsageError(
            f"no code is called {text!r}; take {_names()}, or write it out, such as RS(255,223)+EH(128,120)"
        )
    n, k, distance, family, *inner_parameters = match.groups()
    outer = OuterCode(int(n), int(k))
    if distance is not None and int(distance) != outer.distance:
        raise UsageError(f"the distance of RS({n},{k}) is {outer.distance}, not {distance}; leave it out")
    inner = InnerCode.none() if inner_parameters[0] is None else _inner_code(family, *inner_parameters)
    code = ConcatenatedCode("", outer, inner)
    return ConcatenatedCode(name_of(code), outer, inner)


def name_of(code: ConcatenatedCode) -> str:
    """The name of a named code, the notation of any other."""
    for named in NAMED.values():
        if (named.outer, named.inner) == (code.outer, code.inner):
            return named.name
    return code.notation


def _inner_code(family: str | None, n: str, k: str, d: str | None) -> InnerCode:
    """The inner code of length n and dimension k, with the family and the distance d where they are given."""
    for code in InnerCode.known():
        if (code.n, code.k) == (int(n), int(k)):
            if family is not None and family.upper() != code.family:
                raise UsageError(f"the inner code of these lengths is {code.notation}; write it so")
            if d is not None and int(d) != code.d:
                raise UsageError(f"the distance of {code.notation} is {code.d}, not {d}; leave it out")
            return code
    known = ", ".join(code.notation for code in InnerCode.known())
    raise UsageError(f"there is no inner code of length {n} and dimension {k}; take one of {known}")


def _names() -> str:
    *first, last = NAMED
    return ", ".join(first) + " or " + last
