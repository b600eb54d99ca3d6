"""The study file: what it understands, and each way it can be wrong."""

import ast
import importlib.util
import json
import os
import tomllib
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st
from pydantic import ValidationError

from trackfit.faults import StudyError
from trackfit.study import RESERVED_NAMES, Study, read_study
from trackfit.study_faults import RULES, key_text, model_at, tables
from trackfit.study_fixes import Columns
from trackfit.study_lines import key_lines, line_of
from trackfit.study_table import Table
from trackfit.study_values import nearest

ROOT = Path(__file__).parent.parent

GOOD = """\
[study]
name = "Terns of the skerry"
seed = 7
tags = ["A1", "B2"]

[fixes]
files = ["fixes.csv"]
delimiter = ";"
decimal = ","
time_zone = "Atlantic/Azores"
[fixes.columns]
tag = "ring"

[plane]
crs = "EPSG:3035"

[layers.depth]
file = "layers/depth.nc"
unit = "m"
to_unit = "km"

[layers.sst]
file = "layers/sst.nc"
select = { level = 0.5 }

[layers.water]
file = "layers/water.nc"
east = "u"
north = "v"

[coast]
file = "layers/land.geojson"

[motion]
step_hours = 0.5

[[preference]]
layer = "depth"
shape = "humped"

[[preference]]
name = "colony"
point = { lon = -5.0, lat = 58.0 }
shape = "distance"

[current]
layer = "water"
drift = "estimated"

[errors]
scale = "estimated"
[errors.classes]
"3" = 300.0

[fit]
priors = "weak"

[paths]
interval_hours = 1.0

[output]
folder = "results"
formats = ["csv"]
"""
FILES = ("fixes.csv", *(f"layers/{x}" for x in ("depth.nc", "sst.nc", "water.nc", "land.geojson")))


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """A folder with the files that the good study names."""
    (tmp_path / "layers").mkdir()
    for name in FILES:
        (tmp_path / name).write_text("", encoding="utf-8")
    return tmp_path


def read(folder: Path, text: str) -> Study:
    path = folder / "study.toml"
    path.write_text(text, encoding="utf-8")
    return read_study(path)


def complaint(folder: Path, text: str) -> str:
    with pytest.raises(StudyError, match=r"study\.toml:\d+: ") as caught:
        read(folder, text)
    return str(caught.value).replace(f"{folder}{os.sep}", "")


# What is understood ------------------------------------------------------------------------------


def test_a_good_study_is_understood_with_paths_ready_to_open(folder: Path) -> None:
    study = read(folder, GOOD)
    assert study.path == folder / "study.toml"
    assert study.folder == folder
    assert study.output_folder == folder / "results"
    assert study.fixes.files == (folder / "fixes.csv",)
    assert study.layers["sst"].select == {"level": 0.5}
    assert study.fixes.columns.mapping() == {"tag": "ring"}
    assert [term.term for term in study.preference] == ["depth", "colony"]
    assert study.layers["water"].is_current
    assert not study.layers["depth"].is_current


def test_the_shortest_study_takes_every_default(folder: Path) -> None:
    study = read(folder, '[study]\nname = "x"\n[fixes]\nfiles = ["fixes.csv"]\n')
    assert (study.motion.kind, study.motion.step_hours, study.paths.interval_hours) == (
        "diffusive",
        0.5,
        1.0,
    )
    assert (study.preference, study.current, study.coast, study.plane.crs) == ((), None, None, None)
    assert study.output.formats == ("csv", "geopackage", "geojson", "netcdf")
    assert study.output_folder == folder / "results"
    assert (study.errors.ellipse_probability, study.errors.scale) == (0.632, 1.0)


def test_the_study_as_understood_is_json_and_names_paths_as_written(folder: Path) -> None:
    understood = json.loads(json.dumps(read(folder, GOOD).as_dict()))
    assert understood["fixes"]["files"] == ["fixes.csv"]
    assert understood["layers"]["depth"]["file"] == "layers/depth.nc"
    assert understood["output"]["folder"] == "results"
    assert understood["motion"] == {
        "kind": "diffusive",
        "step_hours": 0.5,
        "pace_log_sd": 0.0,
        "pace_hours": 24.0,
    }
    assert set(understood) == set(Study.model_fields)


def test_the_settings_of_a_layer_make_a_request_for_it(folder: Path) -> None:
    from trackfit.layers.layer import LayerRequest

    layer = read(folder, GOOD).layers["sst"]
    request = LayerRequest(name="sst", **layer.model_dump(exclude={"centre", "scale"}))
    assert request.file == folder / "layers" / "sst.nc"
    assert request.select == {"level": 0.5}


def test_an_absolute_path_stays_absolute(
    folder: Path, tmp_path_factory: pytest.TempPathFactory
) -> None:
    far = tmp_path_factory.mktemp("far") / "fixes.csv"
    far.write_text("", encoding="utf-8")
    study = read(folder, f'[study]\nname = "x"\n[fixes]\nfiles = [{json.dumps(str(far))}]\n')
    assert study.as_dict()["fixes"]["files"] == [far.as_posix()]


def test_reading_from_another_folder_changes_nothing(
    folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    study = read(folder, GOOD)
    monkeypatch.chdir(folder)
    assert read_study("study.toml") == study
    assert read_study("study.toml").path == folder / "study.toml"


def test_a_study_cannot_be_changed(folder: Path) -> None:
    study = read(folder, GOOD)
    with pytest.raises(ValidationError, match="frozen"):
        study.motion.step_hours = 2.0  # type: ignore[misc]


def test_a_mark_at_the_start_and_foreign_line_ends_do_no_harm(folder: Path) -> None:
    path = folder / "study.toml"
    path.write_bytes(b"\xef\xbb\xbf" + GOOD.replace("\n", "\r\n").encode())
    assert read_study(path).study.seed == 7


@pytest.mark.parametrize(("interval", "step"), [(0.3, 0.1), (1.0, 1 / 3), (6.0, 6.0), (1, 0.25)])
def test_an_interval_of_whole_steps_is_taken(folder: Path, interval: float, step: float) -> None:
    text = GOOD.replace("interval_hours = 1.0", f"interval_hours = {interval}")
    study = read(folder, text.replace("step_hours = 0.5", f"step_hours = {step}"))
    assert study.paths.interval_hours == interval


# Each way to be wrong ----------------------------------------------------------------------------

BROKEN: tuple[tuple[str, str, str], ...] = (
    # the text replaced, its replacement, and what the message must hold
    ('name = "Terns of the skerry"\n', "", "study.toml:1: study.name: required, and missing"),
    ("seed = 7", "sed = 7", 'study.toml:3: study.sed: unknown key; did you mean "seed"?'),
    ("seed = 7", "seed = -1", "study.toml:3: study.seed: must be at least 0, got -1"),
    ("seed = 7", "seed = 1.5", "study.seed: must be a whole number, got 1.5"),
    ("seed = 7", "seed = true", "study.seed: must be a whole number, got true"),
    (
        "seed = 7",
        "gap_hours = 7",
        'study.gap_hours: unknown key; did you mean "gap_hours in [paths]"',
    ),
    ('name = "Terns of the skerry"', 'name = ""', 'study.name: must not be empty, got ""'),
    (
        '["A1", "B2"]',
        '["A1", "A1"]',
        'study.tags: each entry may stand once, and "A1" stands twice',
    ),
    ('["A1", "B2"]', '["A1", 2]', "study.toml:4: study.tags[2]: must be text in quotes, got 2"),
    ('["A1", "B2"]', '"A1"', "study.tags: must be a list in [ ]; the header"),
    ('files = ["fixes.csv"]', "", "study.toml:6: fixes.files: required, and missing"),
    ('files = ["fixes.csv"]', "files = []", "fixes.files: must have at least one entry, got []"),
    (
        '["fixes.csv"]',
        '["fixs.csv"]',
        "study.toml:7: fixes.files[1]: no such file (paths are relative to the study file), "
        'got "fixs.csv"; did you mean "fixes.csv"?',
    ),
    ('["fixes.csv"]', '["layers"]', "fixes.files[1]: must be a file, and this is a folder"),
    ('["fixes.csv"]', "[3]", "fixes.files[1]: must be text in quotes: a path"),
    ('["fixes.csv"]', '["  "]', "fixes.files[1]: must not be empty"),
    ('["fixes.csv"]', '["fixes.csv", "./fixes.csv"]', "fixes.files: each file may stand once"),
    ('delimiter = ";"', 'delimiter = ";;"', 'fixes.delimiter: must be one character, got ";;"'),
    (
        'delimiter = ";"',
        'delimiter = ","',
        "fixes.delimiter: the decimal mark cannot part the columns",
    ),
    ('decimal = ","', 'decimal = "-"', 'fixes.decimal: must be one of ".", ",", got "-"'),
    (
        '"Atlantic/Azores"',
        '"Atlantic/Azore"',
        'IANA name such as "UTC" or "Atlantic/Azores", got "Atlantic/Azore"; '
        'did you mean "Atlantic/Azores"?',
    ),
    ('"Atlantic/Azores"', '"Atlantic"', "fixes.time_zone: unknown time zone"),
    ('"Atlantic/Azores"', '"../etc"', "fixes.time_zone: unknown time zone"),
    ('tag = "ring"', 'tga = "ring"', 'fixes.columns.tga: unknown key; did you mean "tag"?'),
    ('tag = "ring"', 'tag = "x"\nlat = "x"', "fixes.columns.lat: this header is the one of tag"),
    ('tag = "ring"', 'tag = "lon"', "fixes.columns.tag: this header is the one of lon already"),
    ('"EPSG:3035"', '"EPSG:nine"', "study.toml:15: plane.crs: 'EPSG:nine' is not a coordinate"),
    ('"EPSG:3035"', '"EPSG:4326"', "plane.crs: "),
    ("[plane]", "[plan]", 'study.toml:14: plan: unknown key; did you mean "plane"?'),
    ("[layers.depth]", '[layers."my depth"]', "layers.my depth: a layer's name is letters, digits"),
    ("[layers.sst]", "[layers.Depth]", 'layers.Depth: differs from layer "depth" in capitals only'),
    ('file = "layers/depth.nc"\n', "", "study.toml:17: layers.depth.file: required, and missing"),
    (
        "layers/depth.nc",
        "layers/depht.nc",
        "layers.depth.file: no such file (paths are relative to the study file), got "
        '"layers/depht.nc"; did you mean "layers/depth.nc"?',
    ),
    ("layers/depth.nc", "nowhere/depth.nc", 'got "nowhere/depth.nc"'),
    ('unit = "m"', 'unit = "parsnip"', "study.toml:19: layers.depth.unit: unknown unit"),
    (
        'to_unit = "km"',
        'to_unit = "degC"',
        'layers.depth.to_unit: "m" cannot become a unit of another',
    ),
    ('to_unit = "km"', "factor = 0.0", "layers.depth.factor: must not be 0"),
    ('to_unit = "km"', "factor = nan", "layers.depth.factor: must be a finite number, got nan"),
    ('to_unit = "km"', "band = 0", "layers.depth.band: must be at least 1, got 0"),
    ('to_unit = "km"', "resolution_km = 0", "layers.depth.resolution_km: must be greater than 0"),
    ('to_unit = "km"', "scale = -2.0", "layers.depth.scale: must be greater than 0, got -2.0"),
    (
        "{ level = 0.5 }",
        '{ level = "top" }',
        'layers.sst.select.level: must be a number, got "top"',
    ),
    ('east = "u"', "", "layers.water.north: a current needs both parts, and east is missing"),
    ('north = "v"', "", "layers.water.east: a current needs both parts, and north is missing"),
    ('north = "v"', 'north = "u"', "layers.water.north: east and north name the same variable"),
    (
        'north = "v"',
        'north = "v"\nvariable = "w"',
        "layers.water.variable: has no place in a layer",
    ),
    (
        'north = "v"',
        'north = "v"\nto_unit = "m/s"',
        "layers.water.to_unit: has no place in a layer",
    ),
    ("layers/land.geojson", "layers/lan.geojson", 'did you mean "layers/land.geojson"?'),
    ("step_hours = 0.5", "step_hours = 0", "motion.step_hours: must be at least 0.0166667, got 0"),
    ("step_hours = 0.5", "step_hours = 30.0", "motion.step_hours: must be at most 24, got 30.0"),
    ("step_hours = 0.5", 'step_hours = "x"', 'motion.step_hours: must be a number, got "x"'),
    (
        "step_hours = 0.5",
        "step_hours = 0.4",
        "paths.interval_hours: must be a whole number of motion.step_hours (0.4); "
        "step_hours = 0.5 would fit, got 1.0",
    ),
    ("step_hours = 0.5", 'kind = "difusive"', 'did you mean "diffusive"?'),
    ("[motion]", "[[motion]]", "motion: must be a table"),
    (
        'layer = "depth"',
        'layer = "depht"',
        "study.toml:38: preference[1].layer: no such layer in [layers] (there: "
        '"depth", "sst", "water"), got "depht"; did you mean "depth"?',
    ),
    ('layer = "depth"', 'layer = "water"', "preference[1].layer: a layer with east and north is a"),
    ('layer = "depth"\n', "", 'preference[1].shape: shape "humped" needs a layer'),
    (
        '"humped"',
        '"hump"',
        'preference[1].shape: must be one of "linear", "humped", "smooth", "distance"',
    ),
    ('"humped"', '"distance"', 'preference[1].shape: shape "distance" needs a point'),
    ('"humped"', '"humped"\nname = "sst"', "preference[1].name: a layer that the term is not made"),
    ('"humped"', '"humped"\nname = "drift"', "preference[1].name: this name is trackfit's own"),
    ('"humped"', '"humped"\nname = "a b"', "preference[1].name: a term's name is letters, digits"),
    ('shape = "humped"\n', "", "preference[1].shape: required, and missing"),
    (
        '[[preference]]\nname = "colony"',
        '[[preference]]\nlayer = "depth"\nshape = "linear"\n[[preference]]\nname = "colony"',
        "preference[2].layer: preference[1] is made of this already",
    ),
    (
        'name = "colony"',
        'name = "Depth"',
        "preference[2].name: preference[1] has this name already",
    ),
    ('name = "colony"\n', "", "preference[2].name: a term with a point needs a name"),
    (
        'name = "colony"',
        'name = "c"\nlayer = "sst"',
        "preference[2].point: a term has a layer or a",
    ),
    ('"distance"', '"humped"', 'study.toml:44: preference[2].shape: shape "humped" needs a layer'),
    ("lon = -5.0", "lon = 365.0", "preference[2].point.lon: must be at most 360, got 365.0"),
    ("lat = 58.0", "lat = 95.0", "study.toml:43: preference[2].point.lat: must be at most 90"),
    ("lon = -5.0, ", "", "preference[2].point.lon: required, and missing"),
    ('layer = "water"', 'layer = "watr"', 'got "watr"; did you mean "water"?'),
    ('layer = "water"', 'layer = "sst"', "current.layer: the layer of a current needs east and"),
    ('drift = "estimated"', 'drift = "free"', 'current.drift: must be "estimated" or a number'),
    (
        'drift = "estimated"',
        "drift = true",
        'current.drift: must be "estimated" or a number, got true',
    ),
    (
        'drift = "estimated"',
        "drift = 3",
        "current.drift: must lie between 0 (not carried) and 2, got 3",
    ),
    ('scale = "estimated"', "scale = 0", "errors.scale: must be greater than 0, got 0"),
    (
        'scale = "estimated"',
        "scale = [1]",
        'errors.scale: must be "estimated" or a number, got [1]',
    ),
    ('scale = "estimated"', "ellipse_probability = 1.0", "must be less than 1, got 1.0"),
    ('scale = "estimated"', "ellipse_probability = 0", "must be greater than 0, got 0"),
    ('scale = "estimated"', "default_sd_m = 0.0", "errors.default_sd_m: must be greater than 0"),
    (
        '"3" = 300.0',
        '"3" = -1.0',
        "study.toml:53: errors.classes.3: must be greater than 0, got -1.0",
    ),
    ('"3" = 300.0', '"3" = "x"', 'errors.classes.3: must be a number, got "x"'),
    ('priors = "weak"', 'priors = "week"', 'fit.priors: must be one of "weak", "none", got "week"'),
    ('priors = "weak"', "coarse_factor = 0", "fit.coarse_factor: must be at least 1, got 0"),
    ('priors = "weak"', "step_check = 1", "fit.step_check: must be true or false, got 1"),
    ('priors = "weak"', "prior_speed_kmh = 0", "fit.prior_speed_kmh: must be greater than 0"),
    ("interval_hours = 1.0", "interval_hours = -1.0", "paths.interval_hours: must be at least"),
    ("interval_hours = 1.0", "interval_hours = inf", "must be a finite number, got inf"),
    (
        "interval_hours = 1.0",
        "gap_hours = 0.5",
        "paths.gap_hours: must not be shorter than paths.int",
    ),
    ("interval_hours = 1.0", "draws = -1", "paths.draws: must be at least 0, got -1"),
    (
        'folder = "results"',
        'folder = "fixes.csv"',
        'output.folder: must be a folder, and "fixes.csv"',
    ),
    ('folder = "results"', 'folder = "fixes.csv/x"', 'must be a folder, and "fixes.csv" is a file'),
    (
        'folder = "results"',
        'folder = "."',
        "output.folder: must be a folder of its own, and this one",
    ),
    ('folder = "results"', 'folder = "layers"', 'this one holds the input "depth.nc"'),
    (
        '["csv"]',
        '["cvs"]',
        'output.formats[1]: must be one of "csv", "geopackage", "geojson", "netcdf"',
    ),
    ('["csv"]', '["csv", "csv"]', 'output.formats: each entry may stand once, and "csv" stands'),
    ('["csv"]', "[]", "output.formats: must have at least one entry"),
    ('["csv"]', '["csv"]\nfigures = "no"', 'output.figures: must be true or false, got "no"'),
    ('["csv"]', '["csv"]\nfigure_format = "gif"', 'must be one of "png", "svg", "pdf", got "gif"'),
    ("[output]", "[output]\n[output.more]", "output.more: unknown key"),
    ("[study]", "study = 3\n[studies]", "study: must be a table, got 3"),
)


@pytest.mark.parametrize(("old", "new", "fragment"), BROKEN, ids=[case[1][:40] for case in BROKEN])
def test_a_broken_study_says_line_key_rule_and_value(
    folder: Path, old: str, new: str, fragment: str
) -> None:
    assert old in GOOD
    assert fragment in complaint(folder, GOOD.replace(old, new, 1))


def test_the_broken_studies_meet_every_rule_in_words() -> None:
    said = " ".join(fragment for _, _, fragment in BROKEN)
    plain = {kind: rule.split("{")[0].strip() for kind, rule in RULES.items()}
    # A rule of our own has no fixed words; a table given wrongly has one wording for two kinds.
    assert [kind for kind, words in plain.items() if words[:24] not in said] == []


def test_all_faults_come_at_once_in_the_order_of_the_file(folder: Path) -> None:
    text = GOOD.replace("seed = 7", "sed = 7").replace('"depth"\n', '"depht"\n')
    text = text.replace('priors = "weak"', 'priors = "week"').replace("[coast]", "[coats]")
    lines = complaint(folder, text).splitlines()
    assert [line.split(": ")[1] for line in lines] == [
        "study.sed",
        "coats",
        "preference[1].layer",
        "fit.priors",
    ]


def test_a_layer_name_is_checked_beside_another_fault_of_its_table(folder: Path) -> None:
    text = GOOD.replace('layer = "water"', 'layer = "watr"').replace(
        'drift = "estimated"', "drift = 9"
    )
    said = complaint(folder, text)
    assert "current.layer: no such layer" in said
    assert "current.drift: must lie between" in said


def test_a_faulty_layer_is_still_known_by_name(folder: Path) -> None:
    said = complaint(folder, GOOD.replace('unit = "m"', "band = 0"))
    assert len(said.splitlines()) == 1


@pytest.mark.parametrize(
    ("text", "line", "words"),
    [
        ("[study]\nname 3\n", 2, "not valid TOML: Expected '=' after a key"),
        ('[study]\nname = "x\n', 2, "not valid TOML"),
        ("[study]\n[study]\n", 2, "not valid TOML"),
        ("[study", 1, "not valid TOML"),
        ("[study]\r\nname = \r\n", 2, "not valid TOML"),
    ],
)
def test_text_that_is_no_toml_names_the_line(
    folder: Path, text: str, line: int, words: str
) -> None:
    said = complaint(folder, text)
    assert said.startswith(f"study.toml:{line}: ")
    assert words in said


def test_an_empty_file_lacks_its_required_tables(folder: Path) -> None:
    assert complaint(folder, "").splitlines() == [
        "study.toml:1: study: required, and missing",
        "study.toml:1: fixes: required, and missing",
    ]


def test_a_missing_study_names_the_near_one(folder: Path) -> None:
    read(folder, GOOD)
    with pytest.raises(
        StudyError, match=r'studdy\.toml: no such study file; did you mean ".*study\.t'
    ):
        read_study(folder / "studdy.toml")
    with pytest.raises(StudyError, match=r"no such study file$"):
        read_study(folder / "none" / "study.toml")


def test_a_folder_is_no_study(folder: Path) -> None:
    with pytest.raises(StudyError, match="a study is a file, and this is a folder"):
        read_study(folder)


def test_text_in_another_encoding_names_the_line_and_the_byte(folder: Path) -> None:
    path = folder / "study.toml"
    path.write_bytes('[study]\nname = "Færøerne"\n'.encode("latin-1"))
    with pytest.raises(StudyError, match=r"study\.toml:2: not UTF-8 text \(byte 0xe6\); save"):
        read_study(path)


@pytest.mark.parametrize("name", ["study.toml", "fixes.csv"])
def test_a_file_that_may_not_be_read_says_so(
    folder: Path, name: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = folder / "study.toml"
    path.write_text(GOOD, encoding="utf-8")

    def refuse(self: Path) -> bytes:
        raise PermissionError(13, "Permission denied")

    # The test may run as an administrator, whom no permission stops.
    if name == "study.toml":
        monkeypatch.setattr(Path, "read_bytes", refuse)
    else:
        monkeypatch.setattr(os, "access", lambda path, mode: Path(path).name != name)
    with pytest.raises(StudyError, match=r"cannot be read: Permission|may not be read"):
        read_study(path)


# Its parts ---------------------------------------------------------------------------------------


def walk(value: object, path: tuple[str | int, ...] = ()) -> list[tuple[str | int, ...]]:
    if isinstance(value, dict):
        return [path, *(p for key, x in value.items() for p in walk(x, (*path, key)))]
    if isinstance(value, list):
        return [path, *(p for i, x in enumerate(value) for p in walk(x, (*path, i)))]
    return [path]


AWKWARD = '''# top
a = 1
"q.k" = "x#[y]"   # note
b.c.d = [1, 2,
  # remark ]
  "a]", { x = 1, y = [ {z = 2}, {z=3} ] },
  ["p", 'q'],
]
s = """
[not] = a table
\\""" x"""
l = \'\'\'
[no]\'\'\'
e = """x\\\\"""
[t]
when = 2020-01-01T00:00:00Z
 [t.u]
 k = {}
[[r]]
x = 1
[r.s]
y = 2
[[r]]
x = 2
[[r.w]]
z=1
[[r.w]]
z=2
[r.s]
"y y" = 3
'''


@pytest.mark.parametrize("text", [GOOD, AWKWARD, AWKWARD.replace("\n", "\r\n")])
def test_every_key_of_a_text_has_its_line(text: str) -> None:
    lines = key_lines(text)
    assert [p for p in walk(tomllib.loads(text)) if p not in lines] == []
    for path, line in lines.items():
        name = next((str(part) for part in reversed(path) if isinstance(part, str)), "")
        # An entry of a list may stand lines below the key.
        assert path == () or isinstance(path[-1], int) or name in text.splitlines()[line - 1]


def test_lines_of_the_awkward_text_are_exact() -> None:
    lines = key_lines(AWKWARD)
    assert lines["b", "c", "d", 3, "y", 1, "z"] == 6
    assert lines["r", 1, "w", 1, "z"] == 28
    assert line_of(lines, ("r", 1, "w", 1, "nothing", "there")) == 27
    assert line_of(lines, ("nowhere",)) == 1


@given(st.lists(st.text("ab\"'\\#[]{}=\n ,.", max_size=6), max_size=4))
def test_no_value_leads_the_locator_astray(values: list[str]) -> None:
    text = f"first = {json.dumps(values)}\nlast = {{ k = {json.dumps(values)} }}\n[end]\nx = 1\n"
    assert tomllib.loads(text)["first"] == values
    assert key_lines(text)["end", "x"] == 4


def test_key_text_counts_from_one() -> None:
    assert key_text(("preference", 1, "point", "lon")) == "preference[2].point.lon"


def test_nearest_is_silent_when_nothing_is_near() -> None:
    assert nearest("zzz", ["depth", "sst"]) == ""
    assert nearest("DEPHT", ["depth", "sst"]) == "depth"


def test_every_key_has_a_meaning_for_the_reference_page() -> None:
    for header, table in tables(Study):
        assert table.__doc__ is not None, header
        for name, field in table.model_fields.items():
            assert field.description, f"{header} {name}"
            assert field.description.endswith("."), f"{header} {name}"


def test_every_table_is_strict_closed_and_frozen() -> None:
    found = [table for _, table in tables(Study)]
    assert len(found) == 18
    for table in found:
        assert issubclass(table, Table)
        assert (table.model_config["strict"], table.model_config["extra"]) == (True, "forbid")
        assert table.model_config["frozen"] is True


def test_the_columns_of_the_study_are_those_of_the_fixes() -> None:
    from trackfit.fixes import COLUMNS

    assert tuple(Columns.model_fields) == tuple(COLUMNS)


def test_the_formats_of_the_study_are_those_of_the_results() -> None:
    from trackfit.results import FORMATS

    assert set(Study.model_fields["output"].annotation.model_fields["formats"].default) == set(
        FORMATS
    )  # type: ignore[union-attr]


def test_reserved_names_are_lower_case_as_they_are_compared() -> None:
    assert all(name == name.lower() for name in RESERVED_NAMES)


def test_a_place_of_the_schema_is_found_by_its_path() -> None:
    assert model_at(Study, ("fixes", "columns")) is Columns
    assert model_at(Study, ("preference", 3, "point")).__name__ == "Point"  # type: ignore[union-attr]
    assert model_at(Study, ("layers", "any")).__name__ == "LayerSettings"  # type: ignore[union-attr]
    assert model_at(Study, ("study", "name")) is None
    assert model_at(Study, ("nothing",)) is None


def test_reading_a_plain_study_loads_nothing_heavy() -> None:
    names = ("faults", "fixes", "lines", "schema", "screening", "table", "trials", "values")
    for name in ("study", *(f"study_{x}" for x in names)):
        tree = ast.parse((ROOT / "trackfit" / f"{name}.py").read_text(encoding="utf-8"))
        at_top = {
            (node.module or "") if isinstance(node, ast.ImportFrom) else node.names[0].name
            for node in tree.body
            if isinstance(node, ast.Import | ast.ImportFrom)
        }
        own = {"trackfit.faults", *(f"trackfit.study_{x}" for x in names)}
        heavy = {
            x
            for x in at_top - own - {"pydantic", "pydantic.fields", "pydantic_core"}
            if x.split(".")[0] == "trackfit" or importlib.util.find_spec(x.split(".")[0]) is None
        }
        assert heavy == set(), name
