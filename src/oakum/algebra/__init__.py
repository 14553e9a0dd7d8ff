"""What the codes are, exactly: the field, the outer, inner and concatenated codes, and bounds on any code."""

from oakum.algebra.concatenated import BinaryParameters, ConcatenatedCode
from oakum.algebra.field import Field
from oakum.algebra.inner import InnerCode
from oakum.algebra.naming import DEFAULT, NAMED, name_of, resolve_code
from oakum.algebra.outer import OuterCode

__all__ = [
    "DEFAULT",
    "NAMED",
    "BinaryParameters",
    "ConcatenatedCode",
    "Field",
    "InnerCode",
    "OuterCode",
    "name_of",
    "resolve_code",
]
