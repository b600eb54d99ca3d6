"""How fast a million fixes are read; prints rows per second, beside pandas' own parse of the file.

pandas checks nothing and, from version 3, may parse on every core: the ratio compares runs of one
machine, not pandas versions.
"""

import time
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from trackfit.fixes import read_fixes

ROWS = 1_000_000
TAGS = 10


def written(folder: Path, kind: str) -> Path:
    rng = np.random.default_rng(1)
    per_tag = ROWS // TAGS
    times = pd.date_range("2015-01-01", periods=per_tag, freq="97s", tz="UTC")
    frame = pd.DataFrame(
        {
            "tag": np.repeat([f"seal{i}" for i in range(TAGS)], per_tag),
            "time": np.tile(times.strftime("%Y-%m-%dT%H:%M:%SZ"), TAGS),
            "lon": rng.uniform(-10, 10, ROWS).round(5),
            "lat": rng.uniform(40, 60, ROWS).round(5),
            "error_class": rng.choice(list("3210AB"), ROWS),
            "ellipse_major_m": rng.integers(500, 900, ROWS),
            "ellipse_minor_m": rng.integers(50, 500, ROWS),
            "ellipse_bearing_deg": rng.integers(0, 180, ROWS),
        }
    )
    path = folder / f"fixes.{kind}"
    if kind == "csv":
        frame.to_csv(path, index=False)
    else:
        frame.to_parquet(path)
    return path


@pytest.mark.benchmark
@pytest.mark.parametrize("kind", ["csv", "parquet"])
def test_a_million_fixes_are_read_in_seconds(tmp_path, kind):
    path = written(tmp_path, kind)
    start = time.perf_counter()
    plain = pd.read_csv(path) if kind == "csv" else pd.read_parquet(path)
    plain_s = time.perf_counter() - start
    start, start_cpu = time.perf_counter(), time.process_time()
    fixes = read_fixes([path])
    seconds, cpu_s = time.perf_counter() - start, time.process_time() - start_cpu
    print(
        f"\n{kind}: {ROWS / seconds:,.0f} rows per second, {seconds:.1f} s, {cpu_s:.1f} s CPU "
        f"({seconds / plain_s:.1f} times pandas {pd.__version__}, which checks nothing)"
    )
    assert len(fixes.table) == len(plain) == ROWS
    assert len(fixes.set_aside) == 0
    # Processor time, so that a busy machine does not fail it; 3 to 5 s were measured for CSV.
    assert cpu_s < 20.0
