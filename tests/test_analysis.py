"""A whole study step by step: read and checked, fitted, filled."""

import dataclasses

import numpy as np
import pandas as pd
import pytest
from conftest import DEMO_TAGS, copied_demo

import trackfit
from trackfit.analysis import Prepared, prepare
from trackfit.faults import FixesError, LayerError, StudyError
from trackfit.inference.fit import FitStatus
from trackfit.layers import Layer
from trackfit.paths import hours_since_1970
from trackfit.study import read_study
from trackfit.usable import NO_ERROR, OTHER_TAG, study_area


def prepared_of(folder, **keys) -> Prepared:
    return prepare(read_study(copied_demo(folder / "demo", **keys)))


def plain_study(folder, fixes: str, extra: str = "", name="odd"):
    """A study of fixes alone."""
    folder.mkdir(exist_ok=True)
    (folder / "fixes.csv").write_text(fixes)
    study = folder / "study.toml"
    study.write_text(f'[study]\nname = "{name}"\n[fixes]\nfiles = ["fixes.csv"]\n{extra}')
    return read_study(study)


def test_the_tracks_are_the_used_fixes(demo):
    prepared = demo.prepared
    assert prepared.fixes.tags == list(DEMO_TAGS)
    assert list(prepared.tracks) == list(DEMO_TAGS)
    for tag, data in prepared.tracks.items():
        table = prepared.fixes.of(tag)
        assert np.array_equal(data.hours, hours_since_1970(table["time"]))
        lon, lat = prepared.plane.to_lonlat(data.at_km)
        # PROJ's inverse of the equal-area plane is good to a millimetre
        assert np.allclose(lon, table["lon"], rtol=0, atol=2e-8)
        assert np.allclose(lat, table["lat"], rtol=0, atol=2e-8)
        assert np.linalg.eigvalsh(data.covariance_km2).min() > 0


def test_other_tags_are_set_aside_with_their_reason(demo):
    aside = demo.prepared.fixes.set_aside
    others = aside[aside["reason"] == OTHER_TAG]
    assert set(others["tag"]) == {"TI-P02", "TI-P03", "TI-P04", "TI-S01"}


def test_the_truths_are_within_four_standard_errors(demo):
    truth = pd.read_csv(demo.folder / "truth" / "true_parameters.csv")
    table = trackfit.parameter_table(demo.fits).merge(truth, on=["tag", "parameter"])
    free = table[table["role"] == "estimated"]
    assert len(free) == 12
    positive = free["parameter"] == "diffusion"
    off = np.where(
        positive,
        np.log(free["estimate"] / free["value"]) * free["estimate"] / free["sd"],
        (free["estimate"] - free["value"]) / free["sd"],
    )
    assert np.abs(off).max() < 4.0


def test_the_table_of_parameters_has_the_tag_first(demo):
    table = trackfit.parameter_table(demo.fits)
    assert table.columns[0] == "tag"
    assert len(table) == 14
    for fit in demo.fits:
        own = table[table["tag"] == fit.tag].drop(columns="tag").reset_index(drop=True)
        pd.testing.assert_frame_equal(own, fit.parameters)


def test_as_many_states_as_foretold(demo):
    for fit in demo.fits:
        assert fit.status is FitStatus.CONVERGED
        assert fit.n_states == demo.prepared.n_states(fit.tag)


def test_filled_hours_are_the_studys(demo):
    for track in demo.tracks:
        data = demo.prepared.tracks[track.tag]
        hours = hours_since_1970(track.table["time"])
        wanted = np.union1d(demo.prepared.report_hours(track.tag), data.hours)
        assert np.abs(wanted[:, None] - hours).min(axis=1).max() <= 0.5 / 3600
        assert track.draws_lonlat.shape == (20, len(hours), 2)


def test_every_tag_responds_to_every_term(demo):
    found = trackfit.preference_responses(demo.prepared, demo.fits)
    assert [(r.tag, r.term) for r in found] == [
        (tag, term) for tag in DEMO_TAGS for term in ("depth", "temperature", "colony")
    ]


def test_progress_is_told_by_tag(tmp_path):
    prepared = prepared_of(
        tmp_path, tags=("TI-P01",), motion__step_hours="1.0", fit__max_iterations="2"
    )
    told = []
    trackfit.fit_tags(prepared, progress=lambda *what: told.append(what))
    assert {tag for tag, _, _ in told} == {"TI-P01"}
    assert told[-1][1:] == (1.0, "done")


def test_the_study_area_reaches_a_quarter_beyond_the_fixes_and_fifty_kilometres_at_least():
    near = study_area(np.array([[0.0, 0.0], [10.0, 20.0]]))
    assert dataclasses.astuple(near) == (-50.0, -50.0, 60.0, 70.0)
    far = study_area(np.array([[0.0, 0.0], [1000.0, 20.0]]))
    assert dataclasses.astuple(far) == (-250.0, -250.0, 1250.0, 270.0)


def test_the_layers_surround_the_fixes(demo):
    at_km = np.concatenate([track.at_km for track in demo.prepared.tracks.values()])
    for layer in demo.prepared.layers.values():
        assert isinstance(layer, Layer)
        assert layer.covers(at_km).all()
        last = np.array(layer.covered.shape[::-1]) - 1
        assert layer.x0_km <= at_km[:, 0].min() - 50
        assert layer.x0_km + last[0] * layer.spacing_km >= at_km[:, 0].max() + 50


def test_every_file_read_is_an_input(demo):
    assert set(demo.prepared.input_files()) == {
        "study.toml", "penguins.csv", "seals.csv", "layers/depth.tif", "layers/temperature.nc",
        "layers/currents.nc", "coast.geojson",
    }  # fmt: skip
    assert all(file.is_file() for file in demo.prepared.input_files().values())


def test_an_unused_layer_is_read_and_noted(tmp_path):
    study = copied_demo(tmp_path / "demo")
    study.write_text(
        study.read_text() + '\n[layers.spare]\nfile = "layers/depth.tif"\nunit = "m"\n'
    )
    prepared = prepare(read_study(study))
    assert "spare" in prepared.layers
    assert "layer 'spare' is read but serves no term of the study" in prepared.notes
    assert "spare" not in prepared.model.standards


def test_missing_cells_are_noted(demo):
    filled = {k: v.share_filled for k, v in demo.prepared.layers.items() if v.share_filled > 0}
    assert filled
    for name, share in filled.items():
        assert any(f"layer '{name}': {share:.1%} of its cells" in n for n in demo.prepared.notes)


# --- refusals ---------------------------------------------------------------------------------


def test_an_unknown_tag(tmp_path):
    with pytest.raises(
        StudyError, match="no usable fix has the tag 'TI-P99'; the fixes hold TI-P01"
    ):
        prepared_of(tmp_path, tags=("TI-P01", "TI-P99"))


def test_no_fix_that_says_how_far_off_it_is(tmp_path):
    study = plain_study(
        tmp_path, "tag,time,lon,lat\na,2020-01-01T00:00Z,1,2\na,2020-01-01T01:00Z,1,2\n"
    )
    with pytest.raises(FixesError, match=rf"no fix is left to use \(2 x {NO_ERROR[:20]}"):
        prepare(study)


def test_fixes_without_an_error_are_set_aside_beside_others(tmp_path):
    study = plain_study(
        tmp_path,
        "tag,time,lon,lat,gps_sd_m\na,2020-01-01T00:00Z,1,2,\na,2020-01-01T01:00Z,1,2,30\n",
    )
    prepared = prepare(study)
    assert prepared.fixes.set_aside["reason"].tolist() == [NO_ERROR]
    assert prepared.tracks["a"].covariance_km2[0] == pytest.approx(9e-4 * np.eye(2), rel=1e-6)


def test_a_fix_outside_the_time_of_a_layer(tmp_path):
    study = copied_demo(tmp_path / "demo", tags=("TI-P01",))
    fixes = study.parent / "penguins.csv"
    lines = fixes.read_text().splitlines()
    mine = next(line for line in lines if "TI-P01" in line)
    header = lines[0]
    when = header.split(",").index("when")
    cells = mine.split(",")
    cells[when] = "2031-01-01T00:00:00Z"
    fixes.write_text("\n".join([*lines, ",".join(cells)]) + "\n")
    with pytest.raises(
        LayerError,
        match=r"tag TI-P01: the fix at 2031-01-01 00:00:00 UTC lies outside the time of layer "
        r"'(temperature|water)' \(2025-01-01 00:00 to 2025-01-31 00:00 UTC, .*\.nc\)",
    ):
        prepare(read_study(study))


def holed(layer: Layer, at_km) -> Layer:
    """The layer with the node below a place not covered."""
    covered = layer.covered.copy()
    col, row = ((at_km - [layer.x0_km, layer.y0_km]) / layer.spacing_km).astype(int)
    covered[row, col] = False
    return dataclasses.replace(layer, covered=covered)


def test_a_fix_outside_the_area_of_a_layer(tmp_path):
    study = copied_demo(tmp_path / "demo", tags=("TI-P01",))
    fixes = study.parent / "penguins.csv"
    lines = fixes.read_text().splitlines()
    columns = lines[0].split(",")
    at = next(i for i, line in enumerate(lines) if "TI-P01" in line)
    cells = lines[at].split(",")
    cells[columns.index("east_deg")] = "-33.5"
    lines[at] = ",".join(cells)
    fixes.write_text("\n".join(lines) + "\n")
    with pytest.raises(
        LayerError,
        match=r"tag TI-P01: the fix at 20.* UTC \(lon -33\.5000, lat .*; 1 in all\) lies "
        r"outside the area of layer '\w+' \(.*\)",
    ):  # fmt: skip
        prepare(read_study(study))


def test_a_path_that_leaves_a_layer_between_the_fixes(demo):
    """The fixes are inside; somewhere along the fitted path the layer has a hole."""
    prepared = demo.prepared
    tag = DEMO_TAGS[0]
    fit = next(f for f in demo.fits if f.tag == tag)
    data = prepared.tracks[tag]
    path = fit.states.mean[:, :2]
    holes = (holed(prepared.layers["depth"], place) for place in path)
    hole = next(layer for layer in holes if layer.covers(data.at_km).all())
    layers = {**prepared.layers, "depth": hole}
    with pytest.raises(
        LayerError,
        match=rf"tag {tag}: the fitted path at .* UTC .* outside the area of layer 'depth'",
    ):
        trackfit.fit_tags(dataclasses.replace(prepared, layers=layers))


def test_a_plane_that_stretches_is_warned_of(tmp_path):
    fixes = "tag,time,lon,lat,gps_sd_m\na,2020-01-01T00:00Z,-60,0,30\na,2020-01-02T00:00Z,60,0,30\n"
    wide = prepare(plain_study(tmp_path / "a", fixes))
    (warning,) = wide.warnings
    assert "the plane stretches distances by up to" in warning
    narrow = prepare(plain_study(tmp_path / "b", fixes.replace("-60", "59")))
    assert narrow.warnings == ()


def test_a_tag_with_few_fixes_is_noted(tmp_path):
    def notes(fixes):
        rows = [f"few,2020-01-01T{h:02d}:00Z,1,2,30" for h in range(fixes)]
        text = "\n".join(["tag,time,lon,lat,gps_sd_m", *rows]) + "\n"
        return prepare(plain_study(tmp_path / str(fixes), text)).notes

    assert notes(20) == ()
    (note,) = notes(19)
    assert note.startswith("tag few: 19 fixes to use are few: expect wide intervals")
    # below three the status of the fit says so
    assert len(notes(3)) == 1
    assert notes(2) == ()


def test_filling_and_drawing_tell_how_far_they_are(demo, tmp_path):
    told = []

    def progress(*words):
        told.append(words)

    tracks = trackfit.fill_tracks(demo.prepared, demo.fits, progress)
    assert told == [
        ("positions", 0.0, "filling tag TI-P01"),
        ("positions", 0.5, "filling tag TI-S02"),
        ("positions", 1.0, "2 tracks filled"),
    ]
    told.clear()
    folder = trackfit.write_results(
        tmp_path / "out", demo.prepared, demo.fits, tracks, progress=progress
    )
    figures = sorted(path.name for path in (folder / "figures").iterdir())
    assert "track_ti-p01.png" in figures
    assert len(told) == len(figures)
    assert {what for what, *_ in told} == {"figures"}
    shares = [done for _, done, _ in told]
    assert shares == sorted(shares)
    assert told[-1] == ("figures", 1.0, f"{len(figures)} figures drawn")


def test_a_fit_that_cannot_be_does_not_stop_the_others(tmp_path):
    rows = [
        f"long,2020-01-01T{h:02d}:00Z,{1 + 0.01 * (h % 5)},{2 + 0.01 * h},30" for h in range(20)
    ]
    study = plain_study(
        tmp_path,
        "\n".join(["tag,time,lon,lat,gps_sd_m", "alone,2020-01-01T00:00Z,1,2,30", *rows]) + "\n",
    )
    prepared = prepare(study)
    fits = trackfit.fit_tags(prepared)
    assert [(f.tag, f.status) for f in fits] == [
        ("alone", FitStatus.TOO_FEW_FIXES),
        ("long", FitStatus.CONVERGED),
    ]
    tracks = trackfit.fill_tracks(prepared, fits)
    assert [track.tag for track in tracks] == ["long"]
    assert prepared.n_states("alone") == 1
    assert trackfit.preference_responses(prepared, fits) == []
    assert trackfit.parameter_table(fits)["tag"].tolist() == ["alone"] * 2 + ["long"] * 2
