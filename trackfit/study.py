"""The study file: read, checked as a whole, and held as one frozen tree of settings.

Every fault is reported at once, with its line, the key, the rule, the value and, where one is near,
the word that was perhaps meant. Nothing heavy is imported here.
"""

import re
import tomllib
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any, Self

from pydantic import Field, PrivateAttr, ValidationError, model_validator

from trackfit.faults import StudyError
from trackfit.study_faults import Fault, faults_of, value_text
from trackfit.study_fixes import FixesFiles
from trackfit.study_lines import KeyPath, key_lines
from trackfit.study_schema import (
    About,
    CoastFile,
    Current,
    Errors,
    Fit,
    LayerSettings,
    Motion,
    Output,
    Paths,
    PlaneSettings,
    Preference,
)
from trackfit.study_screening import Screening
from trackfit.study_table import Table
from trackfit.study_trials import Compare, HoldOut
from trackfit.study_values import nearest, setting

RESERVED_NAMES = ("current", "diffusion", "drift", "error_scale")
"""Words the table of parameters uses itself; no term of the preference may be called so."""

_NAME = re.compile(r"[A-Za-z][A-Za-z0-9_-]*")


class Study(Table):
    """A study as understood: what the file says, and every default it leaves unsaid.

    Attribute names are the keys of the file; paths of files are ready to open.
    """

    study: About = setting(..., "What the study is called and which tags it takes.")
    fixes: FixesFiles = setting(..., "Where the fixes are, and how the tables are written.")
    screening: Screening = setting(Screening, "Fixes to set aside or to flag.")
    plane: PlaneSettings = setting(PlaneSettings, "The flat map to work on.")
    layers: dict[str, LayerSettings] = setting(dict, "Gridded variables over the sea.")
    coast: CoastFile | None = setting(None, "Land.")
    motion: Motion = setting(Motion, "How the animal is taken to move.")
    preference: Annotated[tuple[Preference, ...], Field(strict=False)] = setting(
        (), "What draws the animal."
    )
    current: Current | None = setting(None, "Which layer carries the animal.")
    errors: Errors = setting(Errors, "How far off a fix may be.")
    fit: Fit = setting(Fit, "How the parameters are found.")
    paths: Paths = setting(Paths, "The positions to write out.")
    compare: Compare | None = setting(None, "Other models to fit beside it.")
    hold_out: HoldOut | None = setting(None, "Fixes to hide and to foretell.")
    output: Output = setting(..., "Where the results go.")

    _path: Path = PrivateAttr()

    @model_validator(mode="before")
    @classmethod
    def _output_beside_the_study(cls, raw: Any) -> Any:
        """Let an absent [output] take its defaults, whose folder is relative to the file."""
        return {"output": {}, **raw} if isinstance(raw, dict) else raw

    def model_post_init(self, context: Any) -> None:
        """Keep where the study came from."""
        self._path = context["path"]

    @property
    def path(self) -> Path:
        """The study file."""
        return self._path

    @property
    def folder(self) -> Path:
        """The folder of the study file; relative paths start here."""
        return self._path.parent

    @property
    def output_folder(self) -> Path:
        """The folder for the results."""
        return self.output.folder

    def as_dict(self) -> dict[str, Any]:
        """Return the study with all its defaults as plain values that JSON can hold.

        Paths are written as the study file has them.
        """
        return self.model_dump(mode="json", by_alias=True, context={"folder": self.folder})


def read_study(path: str | Path) -> Study:
    """Read a study file and check all that can be checked without reading the data.

    Parameters
    ----------
    path
        A TOML file. Relative paths inside it start from its folder.

    Returns
    -------
    Study
        Frozen, with every default filled in.

    Raises
    ------
    StudyError
        With one line for each fault: ``FILE:LINE: key: rule, got VALUE; did you mean "..."?``.
        Entries of lists are counted from 1.
    """
    text = _read_text(Path(path))
    raw = _parse(text, str(path))
    where = Path(path).absolute()
    context = {"folder": where.parent, "path": where}
    faults: list[Fault] = []
    try:
        study = Study.model_validate(raw, context=context)
    except ValidationError as error:
        faults = faults_of(error, raw, Study)
    faults += _faults_between_tables(_Parts.of(raw, context), raw)
    if faults:
        raise StudyError(_report(faults, str(path), text))
    return study


def _report(faults: list[Fault], file: str, text: str) -> str:
    lines = key_lines(text)
    ordered = sorted(faults, key=lambda fault: lines.get(fault.path, 0))
    return "\n".join(fault.text(file, lines) for fault in ordered)


def _read_text(path: Path) -> str:
    if path.is_dir():
        raise StudyError(f"{path}: a study is a file, and this is a folder; name the file in it")
    try:
        return path.read_bytes().decode("utf-8-sig")
    except FileNotFoundError:
        raise StudyError(f"{path}: no such study file{_near_file(path)}") from None
    except OSError as fault:
        raise StudyError(f"{path}: the study file cannot be read: {fault.strerror}") from fault
    except UnicodeDecodeError as fault:
        line = fault.object[: fault.start].count(b"\n") + 1
        raise StudyError(
            f"{path}:{line}: not UTF-8 text (byte 0x{fault.object[fault.start]:02x}); "
            "save the study file as UTF-8"
        ) from None


def _near_file(path: Path) -> str:
    known = [p.name for p in path.parent.glob("*.toml")] if path.parent.is_dir() else []
    near = nearest(path.name, known)
    return f'; did you mean "{path.with_name(near)}"?' if near else ""


def _parse(text: str, file: str) -> dict[str, Any]:
    # The parser wants \n at the ends of lines; files from other systems have \r\n.
    text = text.replace("\r\n", "\n")
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as fault:
        found = re.search(r"\(at line (\d+), column (\d+)\)", str(fault))
        line = found[1] if found else text.count("\n") + 1
        raise StudyError(f"{file}:{line}: not valid TOML: {fault}") from None


# Rules between tables ----------------------------------------------------------------------------


@dataclass(frozen=True)
class _Parts:
    """The tables that are sound by themselves, so that rules between them can be told as well."""

    layers: Mapping[str, LayerSettings]
    terms: Mapping[int, Preference]
    motion: Motion | None
    paths: Paths | None
    fixes: FixesFiles | None
    errors: Errors | None
    screening: Screening | None
    output: Output | None

    @classmethod
    def of(cls, raw: Mapping[str, Any], context: dict[str, Any]) -> Self:
        def sound(kind: type[Table], value: Any) -> Any:
            try:
                return kind.model_validate(value, context=context)
            except ValidationError:
                return None

        layers = {name: sound(LayerSettings, value) for name, value in _named(raw).items()}
        listed = raw.get("preference", [])
        terms = enumerate(listed if isinstance(listed, list) else [])
        read = {number: sound(Preference, value) for number, value in terms}
        return cls(
            layers={name: layer for name, layer in layers.items() if layer},
            terms={number: term for number, term in read.items() if term},
            motion=sound(Motion, raw.get("motion", {})),
            paths=sound(Paths, raw.get("paths", {})),
            fixes=sound(FixesFiles, raw.get("fixes")),
            errors=sound(Errors, raw.get("errors", {})),
            screening=sound(Screening, raw.get("screening", {})),
            output=sound(Output, raw.get("output", {})),
        )


def _named(raw: Mapping[str, Any]) -> Mapping[str, Any]:
    """Return the layers as written, sound or not: their names are known in either case."""
    layers = raw.get("layers", {})
    return layers if isinstance(layers, dict) else {}


def _faults_between_tables(parts: _Parts, raw: Mapping[str, Any]) -> list[Fault]:
    known = list(_named(raw))
    return [
        Fault(path, rule, value_text(raw, path), hint)
        for path, rule, hint in (
            *_layer_names(known),
            *_layers_in_use(parts, raw),
            *_terms_told_apart(parts, known),
            *_times(parts),
            *_keeping_at_sea(parts, raw),
            *_screening(parts, raw),
            *_inputs_outside_output(parts),
        )
    ]


_Broken = Iterator[tuple[KeyPath, str, str]]


def _layer_names(known: list[str]) -> _Broken:
    seen: dict[str, str] = {}
    for name in known:
        if not _NAME.fullmatch(name):
            rule = "a layer's name is letters, digits, - and _, and starts with a letter"
            yield ("layers", name), rule, ""
        other = seen.setdefault(name.lower(), name)
        if other != name:
            yield ("layers", name), f'differs from layer "{other}" in capitals only', ""


def _layers_in_use(parts: _Parts, raw: Mapping[str, Any]) -> _Broken:
    # The layer a table names is checked even where another key of that table is at fault.
    for path in _layer_paths(raw):
        name, known = _at(raw, path), list(_named(raw))
        if isinstance(name, str) and name not in known:
            listed = ", ".join(f'"{layer}"' for layer in known) or "none"
            yield path, f"no such layer in [layers] (there: {listed})", nearest(name, known)
        elif name in parts.layers:
            yield from _layer_of_its_kind(path, name, parts)


def _layer_paths(raw: Mapping[str, Any]) -> Iterator[KeyPath]:
    listed = raw.get("preference", [])
    for number in range(len(listed) if isinstance(listed, list) else 0):
        yield "preference", number, "layer"
    yield "current", "layer"


def _at(raw: Any, path: KeyPath) -> Any:
    """Return what stands at a path of the file, None where nothing does."""
    for part in path:
        if isinstance(raw, dict):
            raw = raw.get(part)
        elif isinstance(raw, list) and isinstance(part, int):
            raw = raw[part]
        else:
            return None
    return raw


def _layer_of_its_kind(path: KeyPath, name: str, parts: _Parts) -> _Broken:
    wanted = path[0] == "current"
    if parts.layers[name].is_current != wanted:
        alike = [other for other, layer in parts.layers.items() if layer.is_current == wanted]
        rule = (
            "the layer of a current needs east and north"
            if wanted
            else "a layer with east and north is a current; a preference needs one variable"
        )
        yield path, rule, alike[0] if len(alike) == 1 else ""


def _terms_told_apart(parts: _Parts, known: list[str]) -> _Broken:
    names: dict[str, int] = {}
    made_of: dict[str, int] = {}
    for number, term in parts.terms.items():
        path: KeyPath = ("preference", number)
        key = "name" if term.name else "layer"
        first = made_of.setdefault(term.layer or repr(term.point), number)
        if first != number:
            yield (
                (*path, "layer" if term.layer else "point"),
                f"preference[{first + 1}] is made of this already; the two cannot be told apart",
                "",
            )
        elif names.setdefault(term.term.lower(), number) != number:
            twin = names[term.term.lower()] + 1
            yield (*path, key), f"preference[{twin}] has this name already", ""
        if term.term.lower() in RESERVED_NAMES:
            yield (*path, key), "this name is trackfit's own; give the term another name", ""
        if not _NAME.fullmatch(term.term) and term.name:
            rule = "a term's name is letters, digits, - and _, and starts with a letter"
            yield (*path, "name"), rule, ""
        if term.name in known and term.name != term.layer:
            yield (*path, "name"), "a layer that the term is not made of has this name", ""


def _times(parts: _Parts) -> _Broken:
    if parts.paths is None:
        return
    interval_hours = parts.paths.interval_hours
    if parts.motion is not None:
        steps = interval_hours / parts.motion.step_hours
        # Decimal fractions of an hour are not exact in binary: 0.3 / 0.1 is 2.9999999999999996.
        if round(steps) < 1 or abs(steps - round(steps)) > 1e-9 * steps:
            fitting = interval_hours / max(1, round(steps))
            rule = (
                f"must be a whole number of motion.step_hours ({parts.motion.step_hours:g}); "
                f"step_hours = {fitting:g} would fit"
            )
            yield ("paths", "interval_hours"), rule, ""
    if parts.paths.gap_hours < interval_hours:
        rule = f"must not be shorter than paths.interval_hours ({interval_hours:g})"
        yield ("paths", "gap_hours"), rule, ""


def _keeping_at_sea(parts: _Parts, raw: Mapping[str, Any]) -> _Broken:
    if parts.paths is not None and parts.paths.keep_at_sea and "coast" not in raw:
        yield ("paths", "keep_at_sea"), "needs [coast], which tells land from sea", ""


def _screening(parts: _Parts, raw: Mapping[str, Any]) -> _Broken:
    if parts.screening is None:
        return
    if parts.screening.land_margin_m is not None and "coast" not in raw:
        yield ("screening", "land_margin_m"), "needs [coast], which tells land from sea", ""
    for name in parts.errors.classes if parts.errors else ():
        if name in parts.screening.invalid_classes:
            rule = "screening.invalid_classes sets this class aside; take it out of that list first"
            yield ("errors", "classes", name), rule, ""


def _inputs_outside_output(parts: _Parts) -> _Broken:
    if parts.output is None:
        return
    folder = parts.output.folder.resolve()
    inputs = [layer.file for layer in parts.layers.values()]
    inputs += parts.fixes.files if parts.fixes else ()
    held = next((file for file in inputs if file.resolve().is_relative_to(folder)), None)
    if held is not None:
        rule = f'must be a folder of its own, and this one holds the input "{held.name}"'
        yield ("output", "folder"), rule, ""
