"""The command line from raw files to results, each command in a process of its own."""

import contextlib
import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from conftest import DEMO_TAGS, copied_demo
from pyproj import Geod

import trackfit
from trackfit.results.manifest import foreign_entries

ALL_FILES = {
    "results.json", "parameters.csv", "set_aside.csv", "responses.csv", "positions.csv",
    "positions.gpkg", "positions.geojson", "positions.nc",
}  # fmt: skip


def command(*words, cache: Path | None = None, **more) -> subprocess.CompletedProcess:
    environment = os.environ | ({"TRACKFIT_CACHE": str(cache)} if cache else {})
    done = subprocess.run(
        [sys.executable, "-m", "trackfit_cli", *map(str, words)],
        capture_output=True,
        text=True,
        env=environment,
        **more,
    )
    assert "Traceback" not in done.stdout + done.stderr
    assert "mistake of its own" not in done.stderr, done.stderr
    return done


def small_study(folder: Path, fixes: str, extra: str = "") -> Path:
    """Fixes alone: a fit of a second."""
    folder.mkdir(exist_ok=True)
    (folder / "fixes.csv").write_text(fixes)
    study = folder / "study.toml"
    study.write_text(
        '[study]\nname = "small"\n[fixes]\nfiles = ["fixes.csv"]\n'
        "[motion]\nstep_hours = 1.0\n[output]\nfigures = false\n" + extra
    )
    return study


def walk_csv(tags=("a",), fixes=30, lon=10.0, lat=55.0, seed=1) -> str:
    rng = np.random.default_rng(seed)
    rows = ["tag,time,lon,lat,gps_sd_m"]
    for tag in tags:
        at = np.cumsum(rng.normal(size=(fixes, 2)) * [0.02, 0.01], axis=0)
        at += np.array([lon, lat])
        times = pd.date_range("2021-05-01", periods=fixes, freq="2h")
        rows += [
            f"{tag},{when:%Y-%m-%dT%H:%M:%SZ},{(x + 180) % 360 - 180:.5f},{y:.5f},100"
            for when, (x, y) in zip(times, at, strict=True)
        ]
    return "\n".join(rows) + "\n"


@pytest.fixture(scope="module")
def run(tmp_path_factory):
    """The demonstration with two tags, run once."""
    study = copied_demo(tmp_path_factory.mktemp("run") / "tarrow")
    return study, command("run", study)


def test_the_demonstration_runs(run):
    _, done = run
    assert done.returncode == 0, done.stderr
    assert "Results: " in done.stdout
    for tag in DEMO_TAGS:
        assert f"{tag} diffusion" in done.stdout
        assert f"{tag}: done" in done.stderr


def test_all_that_the_study_asks_is_there(run):
    study, _ = run
    folder = study.parent / "results"
    names = {path.relative_to(folder).as_posix() for path in folder.rglob("*") if path.is_file()}
    assert names >= ALL_FILES, ALL_FILES - names
    pictures = [name for name in names if name.endswith(".png")]
    assert all(any(tag.lower() in name for name in pictures) for tag in DEMO_TAGS)
    assert not foreign_entries(folder)
    assert not [path for path in study.parent.iterdir() if path.name.startswith(".results")]


def test_the_parameters_are_within_four_standard_errors_of_the_truth(run):
    study, _ = run
    truth = pd.read_csv(study.parent / "truth" / "true_parameters.csv")
    found = pd.read_csv(study.parent / "results" / "parameters.csv")
    table = found.merge(truth, on=["tag", "parameter"], suffixes=("", "_true"))
    table = table[table["sd"] > 0]
    assert len(table) == 12
    assert (np.abs(table["estimate"] - table["value"]) / table["sd"]).max() < 4.0


def squared_distance(row, lon, lat) -> float:
    """From an ellipse's centre, in standard deviations (95 %: 5.991)."""
    azimuth, _, metres = Geod(ellps="WGS84").inv(row.lon, row.lat, lon, lat)
    turn = np.radians(azimuth - row.ellipse_bearing_deg)
    along = metres * np.cos(turn) / row.ellipse95_major_m
    across = metres * np.sin(turn) / row.ellipse95_minor_m
    return 5.991464547 * (along**2 + across**2)


def test_the_ellipses_hold_the_true_path(run):
    """Hours of one track hang together, so the rates of two tracks scatter: a wide band."""
    study, _ = run
    truth = pd.read_csv(study.parent / "truth" / "true_paths.csv", parse_dates=["time"])
    found = pd.read_csv(study.parent / "results" / "positions.csv", parse_dates=["time"])
    table = found.merge(truth, on=["tag", "time"], suffixes=("", "_true"))
    for tag, rows in table.groupby("tag"):
        held = np.array([squared_distance(r, r.lon_true, r.lat_true) for r in rows.itertuples()])
        assert len(held) > 150
        assert 0.85 < np.mean(held < 5.991464547) <= 1.0, tag
        assert 0.30 < np.mean(held < 1.386294361) < 0.70, tag


def test_a_second_run_asks_before_it_replaces(run):
    study, _ = run
    before = (study.parent / "results" / "results.json").read_bytes()
    done = command("run", study)
    assert done.returncode == 1
    assert "add --overwrite" in done.stderr
    assert (study.parent / "results" / "results.json").read_bytes() == before


@pytest.mark.slow
def test_a_second_run_compiles_nothing(tmp_path):
    study = copied_demo(tmp_path / "tarrow", output__figures="false")
    cache = tmp_path / "cache"

    def entries():
        return {p.name for p in cache.rglob("*-cache")}

    seconds, kept = [], []
    for _ in range(2):
        # processor time of the command: another process does not count
        begun = os.times()
        done = command("run", study, "--overwrite", cache=cache)
        ended = os.times()
        seconds.append(ended.children_user - begun.children_user)
        assert done.returncode == 0, done.stderr
        kept.append(entries())
    print(f"\nfirst run {seconds[0]:.1f} s, {len(kept[0])} programs compiled; "
          f"second run {seconds[1]:.1f} s, {len(kept[1] - kept[0])} compiled")  # fmt: skip
    assert len(kept[0]) > 5
    assert kept[1] == kept[0]
    assert seconds[1] < seconds[0]


# --- killed at any moment --------------------------------------------------------------------


def whole(folder: Path, name: str) -> bool:
    """Whether a folder holds one study's results, every file as the record lists it."""
    record = json.loads((folder / "results.json").read_text())
    if foreign_entries(folder):
        return False
    listed = {p.relative_to(folder).as_posix() for p in folder.rglob("*") if p.is_file()}
    positions = trackfit.read_results(folder).positions
    return (
        record["study"]["study"]["name"] == name
        and listed >= ALL_FILES - {"responses.csv"}  # without a preference there is none
        and positions["tag"].nunique() == 2
    )


@pytest.mark.slow
def test_killed_at_any_moment_the_old_or_the_new_results_are_whole(tmp_path):
    """SIGKILL at 16 moments, half of them in the last second, where files are written."""
    study = small_study(tmp_path / "s", walk_csv(("a", "b")))
    text = study.read_text()
    folder = study.parent / "results"
    assert command("run", study).returncode == 0
    begun = time.perf_counter()
    assert command("run", study, "--overwrite").returncode == 0
    usual = time.perf_counter() - begun
    moments = [*np.linspace(0.1, 0.8, 8) * usual, *(usual - np.linspace(0.9, -0.2, 8))]
    name, seen = "small", []
    for k, moment in enumerate(moments):
        fresh = f"run {k}"
        study.write_text(text.replace('name = "small"', f'name = "{fresh}"'))
        process = subprocess.Popen(
            [sys.executable, "-m", "trackfit_cli", "run", str(study), "--overwrite"],
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
        )
        with contextlib.suppress(subprocess.TimeoutExpired):
            process.wait(timeout=moment)
        process.send_signal(signal.SIGKILL)
        process.wait()
        old, new = whole(folder, name), whole(folder, fresh)
        assert old != new, (moment, process.returncode)
        name = fresh if new else name
        seen.append(new)
    print(f"\nkilled 16 times: {sum(seen)} left the new results, {16 - sum(seen)} the old")
    assert not all(seen)
    study.write_text(text)
    assert command("run", study, "--overwrite").returncode == 0
    assert whole(folder, "small")
    assert [p.name for p in study.parent.iterdir() if p.name.startswith(".results")] == []


# --- faults and odd studies ------------------------------------------------------------------


def moved_fix(study: Path, tag: str, header: str, value: str) -> None:
    """Change one cell of a tag's first fix."""
    file = study.parent / ("penguins.csv" if "-P" in tag else "seals.csv")
    lines = file.read_text().splitlines()
    at = next(i for i, line in enumerate(lines) if tag in line)
    cells = lines[at].split(",")
    cells[lines[0].split(",").index(header)] = value
    file.write_text("\n".join([*lines[:at], ",".join(cells), *lines[at + 1 :]]) + "\n")


@pytest.mark.parametrize("word", ["check", "run"])
def test_a_fix_outside_a_layer_is_told_with_tag_time_and_layer(tmp_path, word):
    study = copied_demo(tmp_path / "tarrow", tags=("TI-P01",))
    moved_fix(study, "TI-P01", "east_deg", "-33.5")
    done = command(word, study)
    assert done.returncode == 1
    assert "tag TI-P01: the fix at 20" in done.stderr
    assert "lies outside the area of layer '" in done.stderr
    assert not (study.parent / "results").exists()


def test_one_fix_is_too_few_and_all_is_written_still(tmp_path):
    study = small_study(
        tmp_path / "s", "tag,time,lon,lat,gps_sd_m\nlone,2021-05-01T00:00Z,10,55,30\n"
    )
    assert command("check", study).returncode == 0
    done = command("run", study)
    assert done.returncode == 3
    assert "lone: The tag has too few usable fixes to fit; nothing was estimated." in done.stderr
    folder = study.parent / "results"
    parameters = pd.read_csv(folder / "parameters.csv")
    assert parameters["tag"].tolist() == ["lone", "lone"]
    assert parameters["estimate"].isna().tolist() == [True, False]  # the scale is fixed
    assert json.loads((folder / "results.json").read_text())


def test_a_tag_with_one_fix_beside_a_whole_track(tmp_path):
    csv = walk_csv() + "lone,2021-05-01T00:00:00Z,10.0,55.0,30\n"
    study = small_study(tmp_path / "s", csv)
    done = command("run", study)
    assert done.returncode == 3
    positions = pd.read_csv(study.parent / "results" / "positions.csv")
    assert set(positions["tag"]) == {"a"}


def test_a_track_across_the_antimeridian(tmp_path):
    """The same walk at 10 E and at 180: the same ellipses, and lines cut where they must be."""
    tables = []
    for lon in (10.0, 180.0):
        # at the mode: points of the parameters' posterior are drawn, and differ by chance
        fixes = walk_csv(lon=lon, seed=3)
        study = small_study(tmp_path / f"s{lon:.0f}", fixes, "[fit]\npoints = 0\n")
        done = command("run", study)
        assert done.returncode == 0, done.stderr
        tables.append(pd.read_csv(study.parent / "results" / "positions.csv"))
        features = json.loads((study.parent / "results" / "positions.geojson").read_text())
        for feature in features["features"]:
            kind, rings = feature["geometry"]["type"], feature["geometry"]["coordinates"]
            if kind in ("LineString", "MultiLineString"):
                lines = [rings] if kind == "LineString" else rings
                for line in lines:
                    assert np.abs(np.diff(np.array(line)[:, 0])).max(initial=0) < 180
    here, there = tables
    assert there["lon"].min() < -179 < 179 < there["lon"].max()
    assert np.allclose((there["lon"] - here["lon"]) % 360, 170.0, rtol=0, atol=1e-6)
    # input rounded to 1e-5 degrees on both sides, but at other digits: half a metre
    assert np.allclose(there["ellipse95_major_m"], here["ellipse95_major_m"], rtol=1e-3)


@pytest.mark.parametrize(
    ("fixes", "code"),
    [
        ("tag,time,lon,lat,gps_sd_m\n", 1),
        ("", 1),
        ("tag,time,lon,lat\na,2021-05-01T00:00Z,10,55\n", 1),
        ("tag,time,lon,lat,gps_sd_m\n" + 5 * "a,2021-05-01T00:00:00Z,10,55,30\n", 3),
        ("tag,time,lon,lat,gps_sd_m\n"
         + "".join(f"a,2021-05-01T{h:02d}:00:00Z,10,55,30\n" for h in range(9)), 0),
        ("tag,time,lon,lat,gps_sd_m\n"
         + "".join(f"a,2021-05-01T00:00:0{s}Z,{10 + s},55,0.001\n" for s in range(9)), 0),
    ],
    ids=["no rows", "empty", "no errors", "one moment", "at rest", "teleport"],
)  # fmt: skip
def test_odd_tables_end_with_a_code_and_a_sentence(tmp_path, fixes, code):
    done = command("run", small_study(tmp_path / "s", fixes))
    assert done.returncode == code, done.stderr
    if code:
        assert done.stderr.strip().splitlines()[-1].strip()


def test_priors_none_and_an_error_scale_at_rest_end_with_a_sentence(tmp_path):
    """Without priors a tag that never moves has no largest likelihood."""
    rows = "".join(f"a,2021-05-01T{h:02d}:00:00Z,10,55,30\n" for h in range(20))
    study = small_study(
        tmp_path / "s",
        "tag,time,lon,lat,gps_sd_m\n" + rows,
        '[errors]\nscale = "estimated"\n[fit]\npriors = "none"\n',
    )
    done = command("run", study)
    assert done.returncode == 3
    assert done.stderr.strip().splitlines()[-1].startswith("a: ")


@pytest.mark.slow
@pytest.mark.parametrize("moment", [1.5, 2.5, 3.5, 4.5, 5.5, 6.5])
def test_interrupted_it_says_so_and_leaves_nothing(tmp_path, moment):
    """Ctrl-C while libraries load, layers are read, programs are compiled, a mode is sought."""
    study = copied_demo(tmp_path / "tarrow", motion__step_hours="0.1")
    process = subprocess.Popen(
        [sys.executable, "-m", "trackfit_cli", "run", str(study)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )
    time.sleep(moment)
    process.send_signal(signal.SIGINT)
    _, said = process.communicate(timeout=300)
    assert "Traceback" not in said
    assert process.returncode == 130
    assert "Interrupted." in said
    assert not (study.parent / "results").exists()
