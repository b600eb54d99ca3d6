"""The demo's data are what its README says: made again alike, at sea, off by what they state."""

import json
import tomllib
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import rasterio
import shapely
import trackfit_demo
import xarray as xr
from pyproj import Geod
from scipy.stats import chi2, norm
from trackfit_demo import make, sea
from trackfit_demo.animals import SEED, UNITS, regress, simulate
from trackfit_demo.layer_files import ground_velocity
from trackfit_demo.tags import CLASS_SD_M, HEADERS

DEMO = Path(trackfit_demo.__file__).resolve().parent
TABLES = ("penguins.csv", "seals.csv")
TRUTH = ("true_paths.csv", "true_parameters.csv", "planted_faults.csv", "standardisation.json")
LAYERS = ("temperature.nc", "currents.nc")
SAME = (*TABLES, "coast.geojson", *(f"truth/{name}" for name in TRUTH))
WGS84 = Geod(ellps="WGS84")


@pytest.fixture(scope="module")
def made(tmp_path_factory):
    """Every file written anew, with the true paths behind it."""
    folder = tmp_path_factory.mktemp("demo")
    return folder, *make.write_all(folder)


@pytest.fixture(scope="module")
def paths(made):
    return {p.animal.tag: p for p in made[1]}


@pytest.fixture(scope="module")
def truth():
    return pd.read_csv(DEMO / "truth" / "true_paths.csv", parse_dates=["time"])


@pytest.fixture(scope="module")
def study():
    return tomllib.loads((DEMO / "study.toml").read_text(encoding="utf-8"))


def text_table(name):
    return pd.read_csv(DEMO / name, dtype=str, keep_default_na=False)


@pytest.fixture(scope="module")
def usable(paths):
    """Good rows of both tables, with the true position of their minute (n, 2 degrees)."""
    planted = pd.read_csv(DEMO / "truth" / "planted_faults.csv")
    rows = []
    for name in TABLES:
        bad = planted[(planted["file"] == name) & (planted["expect"] == "set aside")]["line"]
        rows.append(text_table(name).drop(index=bad - 2))
    table = pd.concat(rows, ignore_index=True)
    minute = (pd.to_datetime(table["when"]) - pd.Timestamp(sea.EPOCH, tz="UTC")).dt.total_seconds()
    at = (minute / 60).astype(int)
    xy = [paths[w].xy_km[m - paths[w].minute[0]] for w, m in zip(table["who"], at, strict=True)]
    return table, sea.to_lonlat(np.array(xy))


@pytest.mark.parametrize("name", SAME)
def test_script_gives_the_committed_text_files_byte_for_byte(made, name):
    assert (made[0] / name).read_bytes() == (DEMO / name).read_bytes()


@pytest.mark.parametrize("name", LAYERS)
def test_script_gives_the_committed_netcdf_values(made, name):
    with (
        xr.open_dataset(made[0] / "layers" / name) as new,
        xr.open_dataset(DEMO / "layers" / name) as old,
    ):
        xr.testing.assert_identical(new.load(), old.load())


def test_script_gives_the_committed_depths(made):
    with (
        rasterio.open(made[0] / "layers/depth.tif") as new,
        rasterio.open(DEMO / "layers/depth.tif") as old,
    ):
        np.testing.assert_array_equal(new.read(1), old.read(1))
        assert new.profile == old.profile


def test_another_seed_gives_other_paths(monkeypatch, paths):
    monkeypatch.setattr("trackfit_demo.animals.SEED", SEED + 1)
    one_day = replace(paths["TI-P01"].animal, days=1.0)
    monkeypatch.setattr("trackfit_demo.animals.ANIMALS", (one_day,))
    other, known = simulate()[0].xy_km, paths["TI-P01"].xy_km[:1441]
    assert (other[0] == known[0]).all()
    assert (other[1:] != known[1:]).all()


def test_summary_names_every_parameter(capsys, made):
    _, paths, fixes = made
    make.describe(paths[0], fixes["TI-P01"])
    shown = capsys.readouterr().out
    assert all(k in shown for k in UNITS)
    assert shown.startswith("\nTI-P01: 7 days, 307 fixes;")


def test_data_stay_under_four_megabytes():
    wanted = [DEMO / name for name in SAME] + list((DEMO / "layers").iterdir())
    assert 100_000 < sum(f.stat().st_size for f in wanted) < 4_000_000


def test_everything_says_that_it_is_invented(study):
    assert "invented data" in study["study"]["name"]
    assert "Invented island, invented animals, invented data" in (DEMO / "README.md").read_text()
    for name in LAYERS:
        with xr.open_dataset(DEMO / "layers" / name) as data:
            assert data.attrs["comment"] == sea.INVENTED
            assert "invented" in data.attrs["title"]
    with rasterio.open(DEMO / "layers/depth.tif") as data:
        assert data.tags()["COMMENT"] == sea.INVENTED
    coast = json.loads((DEMO / "coast.geojson").read_text())
    assert all(f["properties"]["comment"] == sea.INVENTED for f in coast["features"])


def test_coast_keeps_rfc_7946():
    # RFC 7946 section 3.1.6: rings closed, outer ones counter-clockwise; section 4: no crs member
    coast = json.loads((DEMO / "coast.geojson").read_text())
    assert "crs" not in coast
    assert [f["properties"]["name"] for f in coast["features"]] == ["Tarrow Island", "Tarrow Islet"]
    for feature in coast["features"]:
        (ring,) = feature["geometry"]["coordinates"]
        assert ring[0] == ring[-1]
        assert shapely.LinearRing(ring).is_ccw
        assert shapely.Polygon(ring).is_valid


def test_no_animal_swims_over_land(paths):
    coast = json.loads((DEMO / "coast.geojson").read_text())
    land = shapely.union_all([shapely.geometry.shape(f["geometry"]) for f in coast["features"]])
    assert land.contains(shapely.Point(sea.COLONY_LONLAT))
    for path in paths.values():
        lonlat = sea.to_lonlat(path.xy_km)
        assert not shapely.contains_xy(land, lonlat).any()
        with rasterio.open(DEMO / "layers/depth.tif") as data:
            cells = np.array(list(data.sample(lonlat[::60])))
        assert cells.min() > 0


def test_animals_keep_near_and_swim_at_an_animals_speed(truth):
    for _, track in truth.groupby("tag"):
        lon, lat = track["lon"].to_numpy(), track["lat"].to_numpy()
        home = np.broadcast_to(sea.COLONY_LONLAT, (len(lon), 2))
        assert WGS84.inv(home[:, 0], home[:, 1], lon, lat)[2].max() < 250e3
        assert (track["time"].diff().dropna() == pd.Timedelta(hours=1)).all()
        hourly_km = WGS84.inv(lon[:-1], lat[:-1], lon[1:], lat[1:])[2] / 1000
        assert 0.8 < np.median(hourly_km) < 4
        assert hourly_km.max() < 10


def test_hourly_truth_is_the_simulated_path(truth, paths):
    for tag, track in truth.groupby("tag"):
        path = paths[tag]
        whole = path.minute % 60 == 0
        # six decimals of a degree
        np.testing.assert_allclose(
            track[["lon", "lat"]], sea.to_lonlat(path.xy_km[whole]), rtol=0, atol=5.1e-7
        )


def test_depth_file_samples_the_formula():
    with rasterio.open(DEMO / "layers/depth.tif") as data:
        cells, mark = data.read(1), data.nodata
        rows, cols = np.indices(cells.shape)
        lon, lat = rasterio.transform.xy(data.transform, rows.ravel(), cols.ravel())
        assert data.crs.to_epsg() == 4326
        assert data.units == ("m",)
    deep = sea.depth_m(*sea.PLANE.transform(np.array(lon), np.array(lat))).reshape(cells.shape)
    np.testing.assert_array_equal(cells == mark, deep <= 0)
    wet = cells != mark
    # whole metres; next to the shore never 0
    np.testing.assert_allclose(cells[wet], deep[wet], rtol=0, atol=1.0)
    assert 20 < (~wet).sum() < 150


def test_temperature_file_is_turned_about_on_purpose_and_samples_the_formula():
    with xr.open_dataset(DEMO / "layers/temperature.nc") as data:
        sst = data["sst"].load()
    assert sst.attrs["units"] == "K"
    assert ((sst["lon"] > 180) & (sst["lon"] < 360)).all()
    assert (np.diff(sst["lat"]) < 0).all()
    assert (np.diff(sst["time"]) == np.timedelta64(1, "D")).all()
    x, y = sea.PLANE.transform(*np.meshgrid(sst["lon"] - 360, sst["lat"]))
    np.testing.assert_array_equal(np.isnan(sst[0]), sea.depth_m(x, y) <= 0)
    for day in (0, 13, 30):
        known = sea.temperature_c(x, y, np.full_like(x, 24.0 * day)) + 273.15
        wet = ~np.isnan(sst[day].to_numpy())
        # packed to 0.001 K
        np.testing.assert_allclose(sst[day].to_numpy()[wet], known[wet], rtol=0, atol=5.1e-4)
    assert 2 < float(np.abs(sst[30] - sst[0]).max()) < 6  # the front wanders


def test_currents_are_free_of_divergence():
    with xr.open_dataset(DEMO / "layers/currents.nc") as data:
        east, north = data["u_east"][60].load(), data["v_north"][60].load()
    assert east.attrs["units"] == north.attrs["units"] == "m s-1"
    assert east.attrs["standard_name"] == "eastward_sea_water_velocity"
    lat = np.radians(east["lat"].to_numpy())
    km_n, km_e = 111.0 * 0.1, 111.3 * 0.1 * np.cos(lat)[:, None]
    cos = np.cos(lat)[:, None]
    along_e = np.gradient(east.to_numpy(), axis=1) / km_e
    along_n = -np.gradient(north.to_numpy() * cos, axis=0) / km_n / cos
    x, y = sea.PLANE.transform(*np.meshgrid(east["lon"], east["lat"]))
    far = np.hypot(x, y) > 30  # the flow round the island is finer than the cells
    # differences over two cells of 9 to 11 km see an eddy of 36 km only roughly: 4 % are left
    assert np.std((along_e + along_n)[far]) < 0.1 * np.std((along_e - along_n)[far])
    speed = np.hypot(east, north)
    assert 0.5 < float(speed.max()) < 1.5


def test_current_turns_with_time():
    with xr.open_dataset(DEMO / "layers/currents.nc") as data:
        hours = np.diff(data["time"]) / np.timedelta64(1, "h")
        spread = float(data["u_east"].std("time").mean())
    assert (hours == 6).all()
    assert 0.03 < spread < 0.3


def test_ground_velocity_agrees_with_the_geodesic():
    lon, lat = np.array([-22.5, -20.4, -18.0]), np.array([-40.0, -38.6, -37.1])
    vx, vy = np.array([1.2, -0.3, 0.5]), np.array([0.4, 0.9, -1.1])
    x, y = sea.PLANE.transform(lon, lat)
    dt = 1e-3
    lon1, lat1 = sea.PLANE.transform(x + vx * dt, y + vy * dt, direction="INVERSE")
    bearing, _, metres = WGS84.inv(lon, lat, lon1, lat1)
    speed = metres / 1000 / dt
    east, north = ground_velocity(lon, lat, vx, vy)
    # the inverse projection is good to about 1e-8 degrees, 1 mm in these 1.2 m
    np.testing.assert_allclose(east, speed * np.sin(np.radians(bearing)), atol=3e-3)
    np.testing.assert_allclose(north, speed * np.cos(np.radians(bearing)), atol=3e-3)


def test_study_maps_every_header_and_names_files_that_exist(study):
    assert set(study["fixes"]["columns"].values()) == set(HEADERS)
    assert tuple(study["fixes"]["files"]) == TABLES
    for name in TABLES:
        assert tuple(text_table(name).columns) == HEADERS
    files = [layer["file"] for layer in study["layers"].values()] + [study["coast"]["file"]]
    assert all((DEMO / f).is_file() for f in files)
    assert all(not Path(f).is_absolute() for f in files)


def test_study_and_truth_share_their_constants(study):
    known = json.loads((DEMO / "truth/standardisation.json").read_text())
    for name, layer in known["layers"].items():
        assert study["layers"][name]["centre"] == layer["centre"]
        assert study["layers"][name]["scale"] == layer["scale"]
        assert layer["unit"] in (study["layers"][name].get(k) for k in ("unit", "to_unit"))
    (colony,) = (p for p in study["preference"] if p.get("name") == "colony")
    assert colony["point"] == known["colony"]
    assert study["errors"]["ellipse_probability"] == pytest.approx(1 - np.exp(-1), abs=2e-4)


def test_true_parameters_are_those_of_the_simulation(paths):
    table = pd.read_csv(DEMO / "truth/true_parameters.csv").set_index(["tag", "parameter"])
    assert len(table) == len(paths) * len(UNITS)
    for tag, path in paths.items():
        for k, unit in UNITS.items():
            assert table.loc[(tag, k), "value"] == path.animal.truth[k]
            assert table.loc[(tag, k), "unit"] == unit


def test_planted_faults_stand_where_the_list_says():
    planted = pd.read_csv(DEMO / "truth/planted_faults.csv")
    seen = {}
    for file, line, what in zip(planted["file"], planted["line"], planted["what"], strict=True):
        table = text_table(file)
        row, before = table.loc[line - 2], table.loc[line - 3]
        seen[what] = seen.get(what, 0) + {
            "latitude impossible": lambda r, b: float(r["north_deg"]) < -90,
            "error size missing": lambda r, b: r["gps_m"] == "",
            "row repeated": lambda r, b: r.equals(b.rename(r.name)),
            "longitude missing": lambda r, b: r["east_deg"] == "" and r["north_deg"] != "",
            "latitude missing": lambda r, b: r["north_deg"] == "" and r["east_deg"] != "",
            "time unreadable": lambda r, b: r["when"] == "2025-01-14T27:90:00Z",
            "class Z": lambda r, b: r["class"] == "Z",
            "class missing": lambda r, b: r["class"] == r["long_axis_m"] == "",
            "out of order": lambda r, b: r["who"] == b["who"] and r["when"] < b["when"],
        }[what](row, before)
    assert seen == planted["what"].value_counts().to_dict()
    assert len(seen) == 9


def test_no_fault_stands_outside_the_list(usable):
    table, _ = usable
    assert pd.to_datetime(table["when"], format="ISO8601", errors="coerce").notna().all()
    assert pd.to_numeric(table["north_deg"]).between(-41, -36).all()
    assert not table.duplicated(["who", "when"]).any()
    described = (table["gps_m"] != "") | table["class"].isin(list(CLASS_SD_M))
    assert described.all()


def off_by_m(table, lonlat):
    """Error of each row on the ground, (east, north) metres."""
    lon, lat = pd.to_numeric(table["east_deg"]), pd.to_numeric(table["north_deg"])
    bearing, _, metres = WGS84.inv(lonlat[:, 0], lonlat[:, 1], lon, lat)
    return np.column_stack(
        [metres * np.sin(np.radians(bearing)), metres * np.cos(np.radians(bearing))]
    )


def test_ellipses_hold_their_share_along_each_axis(usable):
    table, lonlat = usable
    rows = (table["long_axis_m"] != "").to_numpy()
    error, cells = off_by_m(table[rows], lonlat[rows]), table[rows]
    major, minor, bearing = (pd.to_numeric(cells[h]).to_numpy() for h in HEADERS[6:])
    a = np.radians(bearing)
    along = (error[:, 0] * np.sin(a) + error[:, 1] * np.cos(a)) / major
    across = (error[:, 0] * np.cos(a) - error[:, 1] * np.sin(a)) / minor
    n = len(along)
    assert n > 150
    # half-axes are sqrt(2) sd, so 2 sum(along^2) is chi-squared with n degrees of freedom
    low, high = chi2.ppf([0.0005, 0.9995], n)
    assert low < 2 * np.sum(along**2) < high
    assert low < 2 * np.sum(across**2) < high
    assert abs(np.corrcoef(along, across)[0, 1]) < norm.ppf(0.9995) / np.sqrt(n)
    share = np.mean(along**2 + across**2 < 1)
    assert abs(share - 0.632) < norm.ppf(0.9995) * np.sqrt(0.632 * 0.368 / n)


@pytest.mark.parametrize("kind", ["gps", "class"])
def test_round_errors_have_the_stated_size(usable, kind):
    table, lonlat = usable
    is_gps = table["gps_m"] != ""
    rows = (is_gps if kind == "gps" else ~is_gps & (table["long_axis_m"] == "")).to_numpy()
    error, cells = off_by_m(table[rows], lonlat[rows]), table[rows]
    sd = cells["gps_m"].astype(float) if kind == "gps" else cells["class"].map(CLASS_SD_M)
    z = error / sd.to_numpy(dtype=float)[:, None]
    for axis in z.T:
        low, high = chi2.ppf([0.0005, 0.9995], len(axis))
        assert low < np.sum(axis**2) < high
        assert abs(axis.mean()) < norm.ppf(0.9995) / np.sqrt(len(axis))


def test_tags_report_as_the_readme_says(usable):
    table, _ = usable
    table = table.assign(time=pd.to_datetime(table["when"])).sort_values(["who", "time"])
    for tag, track in table.groupby("who"):
        hours = track["time"].diff().dt.total_seconds().dropna() / 3600
        gps = tag.startswith("TI-P")
        assert (hours.median() < 0.6) if gps else (1 < hours.median() < 3)
        assert (4 < hours.max() < 26) if gps else (24 < hours.max() < 73)
    seals = table[table["who"].str.startswith("TI-S")]
    assert set(seals["class"]) == set(CLASS_SD_M)
    assert not (seals[seals["who"] == "TI-S02"]["long_axis_m"] != "").any()
    assert 0.5 < (seals[seals["who"] == "TI-S01"]["long_axis_m"] != "").mean() < 0.95


def test_layers_reach_beyond_every_fix_and_every_time(usable):
    table, _ = usable
    when = pd.to_datetime(table["when"]).dt.tz_localize(None)
    for name in LAYERS:
        with xr.open_dataset(DEMO / "layers" / name) as data:
            assert data["time"].min() < when.min()
            assert data["time"].max() > when.max()
            lon, lat = data["lon"] - 360 * (data["lon"] > 180), data["lat"]
            for axis, header in ((lon, "east_deg"), (lat, "north_deg")):
                value = pd.to_numeric(table[header])
                assert float(axis.min()) + 0.5 < value.min()
                assert value.max() < float(axis.max()) - 0.5


def test_true_paths_follow_their_law(paths):
    """Least squares on five-minute steps of the path gives back what drove it."""
    signal = []
    for path in paths.values():
        found = regress(path, np.arange(0, len(path.minute), 5))
        for k, known in path.animal.truth.items():
            # 36 numbers: 4 standard errors are exceeded by chance in 1 of 400 scenes
            assert abs(found.value[k] - known) < 4 * found.se[k], (path.animal.tag, k)
            signal.append(abs(known) / found.se[k])
    assert np.mean(np.array(signal) > 3) > 0.8
    assert min(signal) > 2
