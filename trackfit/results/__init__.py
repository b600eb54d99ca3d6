"""Results written out in open formats, and read back."""

from trackfit.results.convert import to_geodataframe, to_pandas
from trackfit.results.folder import recover, refuse_unless_replaceable, swap_in
from trackfit.results.geojson import write_geojson
from trackfit.results.geopackage import write_geopackage
from trackfit.results.read import JUDGEMENT_FILE, Results, read_results
from trackfit.results.record import CAUTIONS, RecordInfo, build_record, write_record
from trackfit.results.tables import (
    write_drawn_paths,
    write_judgements,
    write_parameters,
    write_positions,
    write_responses,
    write_set_aside,
    write_table,
)
from trackfit.results.trajectory import Discovery, to_xarray, write_trajectory
from trackfit.results.write import FORMATS, write_folder

__all__ = [
    "CAUTIONS",
    "FORMATS",
    "JUDGEMENT_FILE",
    "Discovery",
    "RecordInfo",
    "Results",
    "build_record",
    "read_results",
    "recover",
    "refuse_unless_replaceable",
    "swap_in",
    "to_geodataframe",
    "to_pandas",
    "to_xarray",
    "write_drawn_paths",
    "write_folder",
    "write_geojson",
    "write_geopackage",
    "write_judgements",
    "write_parameters",
    "write_positions",
    "write_record",
    "write_responses",
    "write_set_aside",
    "write_table",
    "write_trajectory",
]
