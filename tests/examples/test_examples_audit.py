"""The example of the README, audited as a new user does it."""

import subprocess
import sys

from example_files import EXAMPLES


def test_the_reserve_example_says_where_each_format_pays(tmp_path):
    """The command ends well and names a finest paying level for each format, the option deciding for the narrow two."""
    command = [sys.executable, "-m", "narrowgauge", "audit", str(EXAMPLES / "reserve" / "reserve.toml")]
    done = subprocess.run(command, cwd=tmp_path, check=False, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    words = " ".join(done.stdout.split())
    assert (
        "float16: finest level where it still pays: 4; on level 5 the edge is too small. The quantity option" in words
    )
    assert (
        "bfloat16: finest level where it still pays: 1; on level 2 the edge is too small. The quantity option" in words
    )
    assert "float32: finest level where it still pays: 6 or finer, not extrapolated." in words
    assert done.stderr.startswith("Plan: 7 levels of 2 to 128 steps.")
    assert (tmp_path / "audits" / "reserve" / "audit.json").is_file()
    assert (tmp_path / "audits" / "reserve" / "levels.csv").is_file()
