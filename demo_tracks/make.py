"""Make the data of the demo: Tarrow Island, its sea and six tagged animals, all of them invented.

The sea is a handful of formulas (sea.py). The layer files sample them (layer_files.py); the animals
move through the formulas themselves (animals.py); tags report what they do (tags.py). So the demo
shares neither code nor interpolation with trackfit: it is a second, independent simulator of the
diffusive motion

    dX = [grad h(X, t) + kappa c(X, t)] dt + sigma dW          (km, hours)

Run `python demo_tracks/make.py` where trackfit is installed: it writes beside itself.
`--to FOLDER` writes elsewhere.
"""

from __future__ import annotations

import argparse
import csv
import json
from pathlib import Path

import numpy as np
from trackfit_demo.animals import STANDARD, UNITS, Path2D, check, regress, simulate, stamp, terms
from trackfit_demo.layer_files import write_coast, write_currents, write_depth, write_temperature
from trackfit_demo.sea import COLONY, COLONY_LONLAT, INVENTED, depth_m, to_lonlat
from trackfit_demo.tags import Fix, observe, spoil


def write_csv(file: Path, rows: list[dict[str, str]]) -> None:
    """Write rows as comma separated text with line feeds."""
    with file.open("w", newline="", encoding="utf-8") as out:
        table = csv.DictWriter(out, list(rows[0]), lineterminator="\n")
        table.writeheader()
        table.writerows(rows)


def write_truth(folder: Path, paths: list[Path2D]) -> None:
    """Hourly true positions, true parameters, and the constants of standardisation."""
    hourly, values = [], []
    for p in paths:
        on_hour = p.minute % 60 == 0
        for m, (lon, lat) in zip(p.minute[on_hour], to_lonlat(p.xy_km[on_hour]), strict=True):
            where = {"lon": f"{lon:.6f}", "lat": f"{lat:.6f}"}
            hourly.append({"tag": p.animal.tag, "time": stamp(m), **where})
        for k, unit in UNITS.items():
            value = f"{p.animal.truth[k]:g}"
            values.append({"tag": p.animal.tag, "parameter": k, "value": value, "unit": unit})
    write_csv(folder / "true_paths.csv", hourly)
    write_csv(folder / "true_parameters.csv", values)
    lon, lat = COLONY_LONLAT
    layers = {k: {"centre": c, "scale": s, "unit": u} for k, (c, s, u) in STANDARD.items()}
    body = {"comment": INVENTED, "layers": layers, "colony": {"lon": lon, "lat": lat}}
    text = json.dumps(body, indent=2) + "\n"
    (folder / "standardisation.json").write_text(text, encoding="utf-8")


def describe(path: Path2D, fixes: list[Fix]) -> None:
    """Print what the true path is like and how well it could tell its parameters."""
    x, y = path.xy_km.T
    parts, truth = terms(x, y, path.minute / 60.0), path.animal.truth
    drift = [sum(truth[k] * g[i] for k, g in parts.items()) for i in (0, 1)]
    away = np.hypot(x - COLONY[0], y - COLONY[1])
    print(
        f"\n{path.animal.tag}: {path.animal.days:g} days, {len(fixes)} fixes; "
        f"{away.max():.0f} km from the colony at most; depth {depth_m(x, y).min():.0f} to "
        f"{depth_m(x, y).max():.0f} m; drift at most {np.hypot(*drift).max():.1f} km/h"
    )
    at = {f.row["when"] for f in fixes}
    seen = np.array([i for i, m in enumerate(path.minute) if stamp(m) in at])
    ways = [regress(path, np.arange(0, len(x), 30)), regress(path, seen)]
    print(f"  {'parameter':32}{'truth':>8}{'every half hour':>20}{'at the fixes':>20}")
    for k in UNITS:
        cells = "".join(f"{w.value[k]:12.3f} ({w.se[k]:.3f})" for w in ways)
        print(f"  {k:32}{truth[k]:8.2f}{cells}")


def write_all(folder: Path) -> tuple[list[Path2D], dict[str, list[Fix]]]:
    """Simulate, observe and write every file; return the true paths and the clean fixes."""
    for sub in ("layers", "truth"):
        (folder / sub).mkdir(parents=True, exist_ok=True)
    paths = simulate()
    check(paths)
    fixes = {p.animal.tag: observe(p, i) for i, p in enumerate(paths)}
    planted = []
    for name, kind in (("penguins.csv", "TI-P"), ("seals.csv", "TI-S")):
        rows, notes = spoil(name, [f for tag, some in fixes.items() if kind in tag for f in some])
        write_csv(folder / name, rows)
        planted += notes
    write_csv(folder / "truth" / "planted_faults.csv", planted)
    write_truth(folder / "truth", paths)
    write_depth(folder / "layers" / "depth.tif")
    write_temperature(folder / "layers" / "temperature.nc")
    write_currents(folder / "layers" / "currents.nc")
    write_coast(folder / "coast.geojson")
    return paths, fixes


def main(arguments: list[str] | None = None) -> None:
    """Write everything and print the summary."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--to", type=Path, default=Path(__file__).resolve().parent)
    paths, fixes = write_all(parser.parse_args(arguments).to)
    for p in paths:
        describe(p, fixes[p.animal.tag])


if __name__ == "__main__":
    main()
