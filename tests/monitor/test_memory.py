"""A recording of any length takes no more memory than a short one."""

import subprocess
import sys
from pathlib import Path

import pytest

from tests.monitor.recordings import QPSK, RAW, environment, qpsk, strict_json

PEAK = """
import sys
from monitor.cli import main
status = main(sys.argv[1:])
with open("/proc/self/status") as file:
    peak = next(line for line in file if line.startswith("VmHWM"))  # of this program alone, unlike ru_maxrss after a fork
print(peak.split()[1], file=sys.stderr)
sys.exit(status)
"""


def peak_mb(path, megabytes):
    """Peak resident memory of a replay of so long a file, in MB."""
    piece = qpsk(20_000).tobytes()
    with path.open("wb") as file:
        for _ in range(megabytes * 1_000_000 // len(piece)):
            file.write(piece)
    arguments = ["replay", str(path), *RAW, *QPSK, "--json"]
    done = subprocess.run([sys.executable, "-c", PEAK, *arguments], env=environment(), capture_output=True, timeout=300)
    assert done.returncode == 0, done.stderr.decode()
    found = strict_json(done.stdout.decode())
    assert found["source"]["samples"] == path.stat().st_size // 8
    assert found["lock"]["locked_pct"] > 90
    return int(done.stderr) / 1000


@pytest.mark.skipif(not Path("/proc/self/status").exists(), reason="no /proc here")
def test_memory_stays_below_400_mb_and_flat_over_a_long_recording(tmp_path):
    short = peak_mb(tmp_path / "short.iq", 30)
    long = peak_mb(tmp_path / "long.iq", 100)
    print(f"peak memory: {short:.0f} MB for 30 MB, {long:.0f} MB for 100 MB")  # noqa: T201
    assert long < 400
    assert long < short + 20
