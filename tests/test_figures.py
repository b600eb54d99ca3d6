import dataclasses
import re

import matplotlib as mpl
import numpy as np
import pandas as pd
import pytest
import shapely
from matplotlib.collections import PolyCollection
from pyproj import Geod
from results_standins import Status, make_fixes, make_response, wandering_track

from trackfit.faults import ResultsError
from trackfit.frame import Plane
from trackfit.layers.layer import Coast, Layer
from trackfit.report import (
    CAUTION,
    FixPoints,
    Scene,
    figure_writers,
    file_stems,
    house_style,
    response_figure,
    response_pages,
    track_figure,
)
from trackfit.report.map_panel import ELLIPSES_SHOWN, round_length_km
from trackfit.report.style import with_unit
from trackfit.report.time_panels import wrapped_degrees

PNG = b"\x89PNG\r\n\x1a\n"


def plane_of(track):
    return Plane.centred_on(track.table["lon"].to_numpy(), track.table["lat"].to_numpy())


def surroundings(track):
    nodes = np.arange(-100, 101, 4.0)
    x, y = np.meshgrid(nodes, nodes)
    depth = -100 + 60 * np.sin(x / 30) + 50 * np.cos(y / 25)
    layer = Layer(
        name="depth",
        unit="m",
        x0_km=-100.0,
        y0_km=-100.0,
        spacing_km=4.0,
        hours=np.zeros(1),
        values=depth[None, :, :, None],
        covered=np.ones(depth.shape, dtype=bool),
        filled=depth > 0,
        share_filled=0.0,
        source="made up",
    )
    island = shapely.Point(20, -20).buffer(12).difference(shapely.Point(20, -20).buffer(4))
    land = shapely.MultiPolygon([island, shapely.box(-300, 40, -20, 300)])
    colony = (float(track.table["lon"].iloc[0]), float(track.table["lat"].iloc[0]))
    return Scene(plane_of(track), Coast(land, "made up"), layer, colony)


CASES = {
    "usual": {"hours": 96},
    "no draws": {"hours": 96, "draws": 0},
    "one fix": {"hours": 1, "draws": 0},
    "two positions": {"hours": 2},
    "antimeridian": {"start": (179.95, -17.0), "hours": 60},
    "north pole": {"start": (30.0, 89.6), "hours": 80},
    "south, fast": {"start": (-120.0, -77.0), "hours": 300, "km_per_hour": 8.0},
    "standing still": {"hours": 48, "km_per_hour": 0.001},
    "four months": {"hours": 2900, "draws": 3},
    "a dollar tag": {"tag": "a$b$_^{\\x", "hours": 20},
}


def draw(case, scene=None):
    return drawn(wandering_track(**CASES[case]), scene)


def drawn(track, scene=None):
    fixes = make_fixes([track])
    with house_style():
        figure = track_figure(track, fixes.table, fixes.set_aside, scene or Scene(plane_of(track)))
        figure.canvas.draw()
    return figure


def boxes(texts):
    return [t.get_window_extent() for t in texts if t.get_visible() and t.get_text()]


def shown_ticks(axis):
    low, high = sorted(axis.get_view_interval())
    return [
        tick.label1
        for tick in axis.get_major_ticks()
        if low <= tick.get_loc() <= high and tick.label1.get_visible()
    ]


def outer_texts(figure):
    """Everything written outside the panels and on their edges."""
    texts = [*figure.texts]
    for axes in figure.axes:
        texts += [axes.title, axes._left_title, axes.xaxis.label, axes.yaxis.label]
        texts += [*shown_ticks(axes.xaxis), *shown_ticks(axes.yaxis)]
        texts += [axes.xaxis.offsetText, axes.yaxis.offsetText]
    for legend in figure.legends:
        texts += legend.get_texts()
    if figure._suptitle is not None and figure._suptitle not in texts:
        texts.append(figure._suptitle)
    return [t for t in texts if t.get_visible() and t.get_text()]


def assert_tidy(figure):
    """No two texts overlap, nothing leaves the page, no legend or footer covers a panel."""
    texts = outer_texts(figure)
    extents = [t.get_window_extent() for t in texts]
    for i, one in enumerate(extents):
        for j in range(i):
            assert not one.overlaps(extents[j]), (texts[i].get_text(), texts[j].get_text())
        assert one.x0 >= -0.5, texts[i].get_text()
        assert one.y0 >= -0.5, texts[i].get_text()
        assert one.x1 <= figure.bbox.x1 + 0.5, texts[i].get_text()
        assert one.y1 <= figure.bbox.y1 + 0.5, texts[i].get_text()
    panels = [axes.get_window_extent() for axes in figure.axes]
    for other in [*(legend.get_window_extent() for legend in figure.legends), *boxes(figure.texts)]:
        assert not any(other.overlaps(panel) for panel in panels)


@pytest.mark.parametrize("case", CASES)
def test_track_figure_is_tidy_and_labelled(case):
    figure = draw(case)
    assert_tidy(figure)
    on_map, lon, lat = figure.axes
    assert on_map.get_xlabel() == "east (km)"
    assert on_map.get_ylabel() == "north (km)"
    assert "north is up" in on_map.get_title(loc="left")
    assert lon.get_ylabel() == "longitude (degrees east)"
    assert lat.get_ylabel() == "latitude (degrees north)"
    assert lat.get_xlabel() == "time (UTC)"
    assert on_map.get_aspect() == 1.0
    assert all(axes.has_data() for axes in figure.axes)
    assert CAUTION in [text.get_text() for text in figure.texts]
    for axes in (on_map, lon, lat):
        assert len(shown_ticks(axes.yaxis)) >= 3


def test_a_full_scene_is_tidy_and_shows_everything():
    track = wandering_track(hours=96)
    figure = draw("usual", surroundings(track))
    assert_tidy(figure)
    words = [text.get_text() for text in figure.legends[0].get_texts()]
    assert words[:2] == ["depth (m)", "land"]
    assert set(words[2:]) == {
        "paths drawn", "95 % ellipse (some times)", "mean path", "mean path in a gap",
        "fix in use", "fix set aside", "start", "end", "colony", "95 % band", "50 % band", "gap",
    }  # fmt: skip
    inside = [t.get_text() for t in figure.axes[0].texts if t.get_visible()]
    assert any(text.endswith(" km") for text in inside)
    assert any(text.lstrip("-\N{MINUS SIGN}").isdigit() for text in inside)


def test_labels_of_contours_keep_off_the_path_and_the_scale_bar():
    track = wandering_track(hours=96)
    scene = surroundings(track)
    axes = drawn(track, scene).axes[0]
    numbers = [text for text in axes.texts if re.fullmatch(r"[−-]?\d+", text.get_text())]
    (bar,) = [text for text in axes.texts if text.get_text().endswith(" km")]
    assert numbers
    path = scene.plane.to_plane(track.table["lon"].to_numpy(), track.table["lat"].to_numpy())
    width = np.ptp(axes.get_xlim())
    for text in numbers:
        # a label is put at a vertex of its contour and may slide along it by a part of its length
        assert np.hypot(*(path - text.get_position()).T).min() > 0.025 * width
        assert not text.get_window_extent().overlaps(bar.get_window_extent())


def test_gap_steps_are_dashed_and_the_gap_is_shaded():
    figure = draw("usual")
    lines = {line.get_label(): line for line in figure.axes[0].lines}
    assert lines["mean path"].get_linestyle() == "-"
    assert lines["mean path in a gap"].get_linestyle() == "--"
    track = wandering_track(**CASES["usual"])
    gap_hours = int(track.table["in_gap"].sum())
    assert len(lines["mean path in a gap"].get_xdata()) == gap_hours + 2
    shades = [patch for patch in figure.axes[1].patches if patch.get_label() == "gap"]
    assert len(shades) == 1
    assert shades[0].get_width() * 24 == pytest.approx(gap_hours + 1, abs=1e-6)  # days as floats


def test_bands_hold_their_share_of_each_coordinate():
    track = wandering_track(hours=24, draws=0)
    table = track.table.assign(ellipse_bearing_deg=0.0)
    straight = dataclasses.replace(track, table=table)
    empty = make_fixes([track])
    figure = track_figure(straight, empty.table, empty.set_aside, Scene(plane_of(track)))
    band = next(
        c for c in figure.axes[2].collections
        if isinstance(c, PolyCollection) and c.get_label() == "_95 % band"
    )  # fmt: skip
    vertices = band.get_paths()[0].vertices
    first = vertices[vertices[:, 0] == vertices[:, 0].min(), 1]
    # with the long axis to the north the 95 % interval of latitude is +-1.95996 sd (normal table);
    # a degree of latitude at 56 N is 111,343 m (recomputed with pyproj's WGS 84 geodesics); the
    # degree's length changes by 1e-5 over the band
    sd_m = table["ellipse95_major_m"].iloc[0] / 2.44775
    degree_m = Geod(ellps="WGS84").inv(0, 55.5, 0, 56.5)[2]
    assert degree_m == pytest.approx(111_343, abs=2)
    assert np.ptp(first) == pytest.approx(2 * 1.95996 * sd_m / degree_m, rel=1e-4)


def test_longitude_runs_on_across_the_antimeridian():
    figure = draw("antimeridian")
    line = figure.axes[1].lines[0]
    assert np.abs(np.diff(line.get_ydata())).max() < 1
    labels = [t.get_text() for t in shown_ticks(figure.axes[1].yaxis)]
    values = [float(text.replace("\N{MINUS SIGN}", "-")) for text in labels]
    assert all(-180 <= value < 180 for value in values)
    points = figure.axes[1].collections[-1].get_offsets()[:, 1]
    low, high = figure.axes[1].get_ylim()
    assert ((points > low) & (points < high)).all()


def test_a_long_track_shows_a_readable_number_of_ellipses():
    figure = draw("four months")
    rings = [
        c for c in figure.axes[0].collections
        if isinstance(c, PolyCollection) and not len(c.get_facecolor())
    ]  # fmt: skip
    assert [len(c.get_paths()) for c in rings] == [ELLIPSES_SHOWN]


def test_fixes_set_aside_that_cannot_be_drawn_are_counted():
    figure = draw("usual")
    notes = [text.get_text() for text in figure.texts]
    assert "1 fix set aside not shown on the map" in notes


def test_set_aside_text_becomes_points_only_where_it_is_a_position():
    rows = pd.DataFrame(
        {
            "time": ["2024-03-01T06:00:00Z", "noon", "2024-03-01 07:00", "2024-03-01T08:00:00Z"],
            "lon": ["-5.0", "1", "x", "10"],
            "lat": ["56", "1", "1", "95"],
        }
    )
    points = FixPoints.set_aside(rows)
    assert points.lonlat.tolist() == [[-5.0, 56.0]]
    assert points.time.tolist() == [pd.Timestamp("2024-03-01T06:00:00Z")]


def test_no_fixes_at_all():
    track = wandering_track(hours=10)
    fixes = make_fixes([track])
    with house_style():
        figure = track_figure(
            track, fixes.table.iloc[:0], fixes.set_aside.iloc[:0], Scene(plane_of(track))
        )
        figure.canvas.draw()
    assert_tidy(figure)
    assert "0 fixes in use" in figure._suptitle.get_text()


def many_responses(tags, terms=2):
    kinds = [("depth, humped", "depth", "m", -200.0, 0.0), ("warm", "temperature", "°C", 5.0, 17.0)]
    return [make_response(f"t{i}", *kind) for i in range(tags) for kind in kinds[:terms]]


@pytest.mark.parametrize(("tags", "terms"), [(1, 1), (1, 2), (4, 2), (5, 1), (20, 2)])
def test_response_pages_are_tidy_and_labelled(tags, terms):
    responses = many_responses(tags, terms)
    pages = response_pages(responses)
    drawn = [r for page in pages for panel in page.panels for r in panel]
    assert sorted(map(id, drawn)) == sorted(map(id, responses))
    for page in pages:
        with house_style():
            values = {(r.tag, r.term): np.linspace(r.at.min(), r.at.max(), 15) for r in responses}
            figure = response_figure(page.panels, values, alike=page.alike)
            figure.canvas.draw()
        assert_tidy(figure)
        assert len(figure.axes) == len(page.panels)
        for axes, panel in zip(figure.axes, page.panels, strict=True):
            assert axes.get_ylabel() == "preference h (km²/h)"
            assert axes.get_xlabel() == f"{panel[0].layer} ({panel[0].unit})"
            assert len(axes.collections) == len(panel)
            curves = [line for line in axes.lines if line.get_marker() == "None"]
            np.testing.assert_array_equal(curves[1].get_ydata(), panel[0].h)


def test_rug_stands_at_the_values_met():
    response = make_response()
    met = np.array([-150.0, -40.0, np.nan, -90.0])
    figure = response_figure([[response]], {(response.tag, response.term): met})
    rug = next(line for line in figure.axes[0].lines if line.get_marker() == "|")
    assert rug.get_xdata().tolist() == [-150.0, -90.0, -40.0]
    assert rug.get_ydata().max() < response.lower95.min()


def test_many_tags_take_several_pages():
    pages = response_pages(many_responses(45))
    assert [(page.term, page.part) for page in pages] == [
        (term, (f"page{k}",)) for term in ("depth, humped", "warm") for k in (1, 2, 3)
    ]
    assert response_pages([]) == []
    tracks = [wandering_track("t0", hours=3)]
    scene = Scene(plane_of(tracks[0]))
    names = list(figure_writers(tracks, make_fixes(tracks), many_responses(45), scene))
    assert names[1:3] == [f"figures/responses_depth_humped_page{k}.png" for k in (1, 2)]
    names = list(figure_writers(tracks, make_fixes(tracks), many_responses(5), scene))
    assert names[1:] == ["figures/responses_depth_humped.png", "figures/responses_warm.png"]


def test_panels_of_one_term_share_their_axis():
    wide = dataclasses.replace(make_response("t0"), upper95=make_response("t0").h + 9.0)
    responses = [wide, *(make_response(f"t{k}") for k in range(1, 6))]
    page = response_pages(responses)[0]
    figure = response_figure(page.panels, alike=page.alike)
    assert len({axes.get_ylim() for axes in figure.axes}) == 1
    assert figure.axes[0].get_ylim()[1] > wide.upper95.max()


def test_a_fit_that_failed_is_told_and_does_not_set_the_axis():
    wide = dataclasses.replace(
        make_response("t0"), upper95=make_response("t0").h + 900.0, fit_status=Status.stuck
    )
    responses = [wide, *(make_response(f"t{k}") for k in range(1, 6))]
    page = response_pages(responses)[0]
    with house_style():
        figure = response_figure(page.panels, alike=page.alike)
    assert figure.axes[0].get_title(loc="left") == "tag t0 (stuck)"
    assert figure.axes[1].get_title(loc="left") == "tag t1"
    assert figure.axes[0].get_ylim()[1] < 20.0
    together = response_figure([responses[:2]])
    assert [t.get_text() for t in together.legends[0].get_texts()] == ["t0 (stuck)", "t1"]


def test_panels_fill_their_rows():
    for tags, rows in ((5, [3, 2]), (6, [3, 3]), (8, [4, 4]), (9, [3, 3, 3])):
        page = response_pages(many_responses(tags, 1))[0]
        figure = response_figure(page.panels, alike=page.alike)
        tops = [round(axes.get_position().y1, 3) for axes in figure.axes]
        assert [tops.count(top) for top in sorted(set(tops), reverse=True)] == rows


@pytest.mark.parametrize(
    ("unit", "label"),
    [("degC", "x (°C)"), ("km^2", "x (km²)"), ("m", "x (m)"), ("1", "x"), ("", "x")],
)
def test_units_are_written_as_people_do(unit, label):
    assert with_unit("x", unit) == label


def test_the_point_of_the_study_has_its_own_name_on_the_map():
    track = wandering_track(hours=30)
    scene = dataclasses.replace(surroundings(track), colony_name="haul-out $1")
    labels = drawn(track, scene).axes[0].get_legend_handles_labels()[1]
    assert r"haul-out \$1" in labels


def test_the_legend_shows_the_bands_as_they_are_seen():
    """The 50 % band lies over the 95 % band: its own 0.40 on 0.22 covers 1 - 0.6 x 0.78 = 0.532."""
    axes = drawn(wandering_track(hours=30)).axes[2]
    shown = dict(zip(*reversed(axes.get_legend_handles_labels()), strict=True))
    assert shown["95 % band"].get_alpha() == pytest.approx(0.22)
    assert shown["50 % band"].get_alpha() == pytest.approx(0.532)


def test_track_figures_tell_of_a_fit_that_failed():
    track = wandering_track(hours=30, fit_status=Status.stuck)
    figure = drawn(track)
    assert_tidy(figure)
    assert "Fit status stuck: not to be relied on" in figure.get_suptitle()
    assert "Fit status" not in drawn(wandering_track(hours=30)).get_suptitle()


@pytest.mark.parametrize(("kind", "start"), [("png", PNG), ("svg", b"<?xml"), ("pdf", b"%PDF")])
def test_figures_are_written_alike_each_time(tmp_path, kind, start):
    tracks = [wandering_track(hours=12), wandering_track("Ω/7", hours=8)]
    tracks_fixes = make_fixes(tracks)
    responses = [make_response()]
    before = dict(mpl.rcParams)
    writers = figure_writers(
        tracks, tracks_fixes, responses, Scene(plane_of(tracks[0])), figure_format=kind
    )
    assert list(writers) == [
        f"figures/track_seal_7.{kind}",
        f"figures/track_7.{kind}",
        f"figures/responses.{kind}",
    ]
    for number, writer in enumerate(writers.values()):
        first, second = (tmp_path / f"{number}{word}.{kind}" for word in "ab")
        writer(first)
        writer(second)
        assert first.read_bytes().startswith(start)
        assert first.stat().st_size > 5000
        # the writers of SVG and PDF name parts after their places in memory
        assert kind != "png" or first.read_bytes() == second.read_bytes()
    assert dict(mpl.rcParams) == before


def test_unknown_figure_format_is_refused():
    track = wandering_track(hours=3)
    with pytest.raises(ResultsError, match="figure_format 'gif' is not known: choose from png"):
        figure_writers(
            [track], make_fixes([track]), [], Scene(plane_of(track)), figure_format="gif"
        )


def test_file_stems_are_safe_and_never_shared():
    tags = ["a", "A", "a b", "a_b", "a/b", "../a", "Ω", "", "con" * 40, "x.y"]
    # a tag that looks like the digits which another one gets
    tags.append(file_stems(tags)["A"])
    stems = file_stems(tags)
    assert list(stems) == tags
    assert len(set(stems.values())) == len(tags)
    assert all(
        stem and set(stem) <= set("abcdefghijklmnopqrstuvwxyz0123456789_-")
        for stem in stems.values()
    )


def test_file_stems_have_digits_only_where_they_clash():
    assert file_stems(["TI-P01", "seal 7"]) == {"TI-P01": "ti-p01", "seal 7": "seal_7"}


@pytest.mark.parametrize(
    ("longest", "length"), [(34.0, 20.0), (1.0, 1.0), (0.7, 0.5), (999.0, 500.0), (0.02, 0.02)]
)
def test_scale_bars_have_round_lengths(longest, length):
    assert round_length_km(longest) == pytest.approx(length, rel=1e-12)


def test_degrees_are_written_in_the_usual_range():
    assert wrapped_degrees(180.5) == "\N{MINUS SIGN}179.5"
    assert wrapped_degrees(-190.0) == "170"
