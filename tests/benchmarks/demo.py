"""Time and memory of the whole demo, as a user meets it: first with nothing compiled, then again.

Run on demand: ``python tests/benchmarks/demo.py``. Each run is a process of its own; compiled code goes to an empty
temporary folder.
"""

import os
import sys
import tempfile
import time
from pathlib import Path

SETTINGS = Path(__file__).parents[2] / "configs" / "demo.yml"
COMMAND = "from fluvinv.cli import script; script()"


def run_demo(folder: Path, name: str) -> tuple[float, float, float]:
    """Run the demo in a process of its own; return wall time (s), processor time (s) and peak memory (MiB)."""
    arguments = [sys.executable, "-c", COMMAND, "run", str(SETTINGS), "-q", "--output", str(folder / name)]
    environment = os.environ | {"NUMBA_CACHE_DIR": str(folder / "compiled")}
    start = time.perf_counter()
    process = os.posix_spawn(sys.executable, arguments, environment)
    _, status, usage = os.wait4(process, 0)
    wall = time.perf_counter() - start
    if status != 0:
        raise SystemExit(f"the demo ended with exit code {os.waitstatus_to_exitcode(status)}")
    per_mib = 1024 if sys.platform != "darwin" else 1024**2  # Linux counts in KiB, macOS in bytes
    return wall, usage.ru_utime + usage.ru_stime, usage.ru_maxrss / per_mib


def main() -> None:
    """Print one line per run."""
    with tempfile.TemporaryDirectory() as temporary:
        folder = Path(temporary)
        print("        wall s  processor s  peak MiB")
        for name in ("cold", "warm"):
            wall, processor, memory = run_demo(folder, name)
            print(f"{name:6} {wall:7.1f} {processor:12.1f} {memory:9.0f}")


if __name__ == "__main__":
    main()
