"""The algebra comes up without the heavy libraries: a named code never needs them."""

import os
import subprocess
import sys

import pytest

HEAVY = {"galois", "numba", "llvmlite", "scipy", "sympy"}
USE_EVERY_TABLE = """
import sys
from oakum import algebra
from oakum.algebra import bounds
for text in (*algebra.NAMED, "RS(255,239)+EB(128,112)", "RS(255,223)+EB(128,104)"):
    code = algebra.resolve_code(text)
    code.outer.parity_matrix, code.outer.check_matrix, code.inner.check_columns, code.inner.parity_tables
    bounds.shannon_limit(code.rate), bounds.blokh_zyablov_relative_distance(code.rate)
print(*sorted(sys.modules))
"""


@pytest.mark.parametrize(
    "program", ["import sys, oakum.algebra; print(*sorted(sys.modules))", USE_EVERY_TABLE]
)
def test_no_heavy_imports(program: str) -> None:
    environment = os.environ | {"PYTHONPATH": os.pathsep.join(sys.path)}
    run = subprocess.run(
        [sys.executable, "-c", program], env=environment, capture_output=True, text=True, check=True
    )
    loaded = {name.partition(".")[0] for name in run.stdout.split()}
    assert "numpy" in loaded
    assert not loaded & HEAVY
