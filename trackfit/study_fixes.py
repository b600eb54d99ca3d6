"""The tables of a study file that say where the fixes are and how they are written."""

from typing import Annotated, Literal, Self

from pydantic import Field, model_validator

from trackfit.study_table import Table
from trackfit.study_values import Files, Text, TimeZone, refuse, setting


class Columns(Table):
    """The headers of your tables, where they differ from trackfit's own names.

    Only the columns you name are looked up under your header; the others keep their own name. Any
    column but `time`, `lon` and `lat` may be missing from a table.
    """

    tag: Text | None = setting(
        None, "Name of the tag (one deployment on one animal).", shown="`tag`"
    )
    time: Text | None = setting(None, "Date and time of the fix.", shown="`time`")
    lon: Text | None = setting(None, "Longitude of the fix.", unit="degrees east", shown="`lon`")
    lat: Text | None = setting(None, "Latitude of the fix.", unit="degrees north", shown="`lat`")
    gps_sd_m: Text | None = setting(
        None,
        "Standard deviation of a satellite-navigation fix, along each axis.",
        unit="metres",
        shown="`gps_sd_m`",
    )
    error_class: Text | None = setting(
        None,
        "The supplier's quality class of the fix, looked up in `[errors.classes]`.",
        shown="`error_class`",
    )
    ellipse_major_m: Text | None = setting(
        None,
        "Longer half-axis of the supplier's error ellipse.",
        unit="metres",
        shown="`ellipse_major_m`",
    )
    ellipse_minor_m: Text | None = setting(
        None,
        "Shorter half-axis of the supplier's error ellipse.",
        unit="metres",
        shown="`ellipse_minor_m`",
    )
    ellipse_bearing_deg: Text | None = setting(
        None,
        "Direction of the longer half-axis.",
        unit="degrees clockwise from true north",
        shown="`ellipse_bearing_deg`",
    )

    @model_validator(mode="after")
    def _one_header_each(self) -> Self:
        given = self.mapping()
        used = {name: name for name in type(self).model_fields if name not in given}
        for column, header in given.items():
            if header in used:
                refuse(f"this header is the one of {used[header]} already", key=column)
            used[header] = column
        return self

    def mapping(self) -> dict[str, str]:
        """Return trackfit's column name -> the header in the files, for the columns named."""
        return {name: header for name, header in self if header is not None}


class FixesFiles(Table):
    """Where the fixes are, and how the tables are written."""

    files: Files = setting(
        ...,
        "Tables of fixes, one row a fix: CSV (also gzipped) or Parquet. A track may go on in a "
        "second file.",
    )
    delimiter: Annotated[str, Field(min_length=1, max_length=1)] | None = setting(
        None,
        r'What parts the columns: one character (`"\t"` for a tab).',
        shown="found from the file",
    )
    decimal: Literal[".", ","] = setting(".", "The decimal mark of the numbers.")
    time_zone: TimeZone = setting(
        "UTC", "Zone of the times that carry none, by its IANA name. Results are always in UTC."
    )
    columns: Columns = setting(Columns, "Your headers, where they differ.", shown="own names")

    @model_validator(mode="after")
    def _marks_and_files(self) -> Self:
        if self.delimiter == self.decimal:
            refuse("the decimal mark cannot part the columns too", key="delimiter")
        real = [path.resolve() for path in self.files]
        if len(set(real)) < len(real):
            refuse("each file may stand once", key="files")
        return self
