"""The demonstration runs to its end, and leaves nothing behind."""

import os
import subprocess
import sys
from pathlib import Path

SAMPLES = Path(__file__).parents[2] / "samples"


def test_demo(tmp_path: Path) -> None:
    environment = os.environ | {"OAKUM_VENV": sys.prefix, "TMPDIR": str(tmp_path)}
    before = sorted(SAMPLES.rglob("*"))
    done = subprocess.run(
        ["sh", str(SAMPLES / "demo.sh")],
        env=environment,
        cwd=tmp_path,
        capture_output=True,
        text=True,
        timeout=250,
    )
    assert done.returncode == 0, done.stdout + done.stderr
    assert "every file is back, bit for bit" in done.stdout
    assert list(tmp_path.iterdir()) == []
    assert [path for path in sorted(SAMPLES.rglob("*")) if path not in before] == []
