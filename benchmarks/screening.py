"""How long does it take to read and screen a million fixes, and how much memory?

    python benchmarks/screening.py [FIXES]

50 animals about their centres, a fix every 30 minutes, two of a hundred failed, in one CSV file; then `bayesrange
screen` in a process of its own, as a user would start it. Prints seconds of the processor (user and system), seconds
by the clock, and the largest resident memory.
"""

import platform
import resource
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
import pandas as pd
from scipy.signal import lfilter

ANIMALS, HOURS, CROSSING_H, SPREAD_M = 50, 0.5, 12.0, 800.0


def write_study(folder: Path, fixes: int) -> None:
    rng, parts = np.random.default_rng(1), []
    each = fixes // ANIMALS
    phi = np.exp(-HOURS / CROSSING_H)
    time_of = pd.date_range("2030-01-01", periods=each, freq="30min").strftime("%Y-%m-%dT%H:%M:%SZ")
    for k in range(ANIMALS):
        place = lfilter([1], [1, -phi], SPREAD_M * np.sqrt(1 - phi**2) * rng.normal(size=(each, 2)), axis=0)
        place += (500_000 + 3000 * (k % 8), 5_600_000 + 3000 * (k // 8)) + 10 * rng.normal(size=(each, 2))
        track = pd.DataFrame({"animal": f"A{k:02d}", "time": time_of, "group": f"G{k // 2:02d}", "error_m": 10})
        track[["x", "y"]] = place.round(1)
        track.loc[rng.random(each) < 0.02, ["x", "y"]] = np.nan
        parts.append(track)
    pd.concat(parts).to_csv(folder / "fixes.csv", index=False)
    (folder / "study.toml").write_text('[study]\ncrs = "EPSG:32631"\n[fixes]\nfile = "fixes.csv"\n')


def main() -> None:
    fixes = int(sys.argv[1]) if len(sys.argv) > 1 else 1_000_000
    with tempfile.TemporaryDirectory() as folder:
        write_study(Path(folder), fixes)
        begun = time.perf_counter()
        subprocess.run([sys.executable, "-m", "bayesrange", "screen", folder], check=True, stdout=subprocess.DEVNULL)
        clock = time.perf_counter() - begun
    used = resource.getrusage(resource.RUSAGE_CHILDREN)
    print(
        f"{fixes:,} fixes: {used.ru_utime + used.ru_stime:.1f} s of the processor, {clock:.1f} s by the clock, ", end=""
    )
    print(f"{used.ru_maxrss / 1024**2:.2f} GiB ({platform.machine()}, Python {platform.python_version()})")


if __name__ == "__main__":
    main()
