"""From a study's settings to the parameters that are fitted."""

import dataclasses

import numpy as np
import pytest
from conftest import copied_demo
from engine_standins import isotropic, walk
from hypothesis import given
from hypothesis import strategies as st

from trackfit.faults import LayerError
from trackfit.inference.task import TrackData
from trackfit.model import DRIFT_PRIOR, SCALE_PRIOR_LOG_SD, build_model, typical_diffusion
from trackfit.motion import DistanceTerm
from trackfit.study import read_study


def study_of(folder, **keys):
    return read_study(copied_demo(folder / "demo", **keys))


def built(demo, folder, **keys):
    return build_model(study_of(folder, **keys), demo.prepared.layers, demo.prepared.plane)


@pytest.fixture(scope="module")
def model(demo):
    return demo.prepared.model


def test_the_parameters_in_the_engines_order(model):
    """Motion, preference terms as the study has them, current drift, error scale."""
    assert [(p.name, p.unit, p.positive) for p in model.base.parameters.all] == [
        ("diffusion", "km/sqrt(h)", True),
        ("preference.depth.linear", "km^2/h", False),
        ("preference.temperature.linear", "km^2/h", False),
        ("preference.temperature.squared", "km^2/h", False),
        ("preference.colony.distance", "km/h", False),
        ("current.drift", "1", False),
        ("error_scale", "1", True),
    ]
    assert model.base.field.n_amplitudes == 5
    assert [(n.term, n.layer, n.unit) for n in model.names] == [
        ("depth", "depth", "m"),
        ("temperature", "temperature", "degC"),
        ("colony", "distance", "km"),
    ]


def test_terms_stand_before_their_layers(model, demo):
    depth, temperature, colony = model.base.field.terms
    assert (depth.humped, temperature.humped) == (False, True)
    assert isinstance(colony, DistanceTerm)
    layers = demo.prepared.layers
    assert model.base.layers[0] == (layers["depth"], layers["temperature"], None)
    assert model.base.layers[1] is layers["water"]
    at = demo.prepared.plane.to_lonlat(np.asarray(colony.point_km)[None])
    # PROJ's inverse of the equal-area plane is good to a millimetre
    assert (at[0][0], at[1][0]) == pytest.approx((-20.299, -38.642), abs=2e-8)


def test_layers_are_standardised_as_the_study_says(model):
    depth, temperature, _ = model.base.field.terms
    assert (float(depth.centre), float(depth.scale)) == (2000.0, 1000.0)
    assert (float(temperature.centre), float(temperature.scale)) == (11.0, 1.5)
    assert set(model.standards) == {"depth", "temperature"}


def seen(layer):
    """Values inside the source and not filled in."""
    return layer.values[:, layer.covered & ~layer.filled, 0]


def test_without_a_word_by_mean_and_spread_of_what_was_measured(demo, tmp_path):
    study = copied_demo(tmp_path / "demo")
    lines = study.read_text().splitlines()
    study.write_text("\n".join(x for x in lines if not x.startswith(("centre", "scale"))))
    found = build_model(read_study(study), demo.prepared.layers, demo.prepared.plane).standards
    for name in ("depth", "temperature"):
        values = seen(demo.prepared.layers[name])
        assert found[name].centre == pytest.approx(values.mean(), rel=1e-12)
        assert found[name].scale == pytest.approx(values.std(), rel=1e-12)


def test_a_weak_prior_is_the_typical_speed_on_typical_slopes(demo, tmp_path):
    """sd times the root mean square slope of the potential is prior_speed_kmh."""
    model = built(demo, tmp_path, fit__prior_speed_kmh="3.0")
    by_name = {p.name: p for p in model.base.parameters.all}
    for name, centre, scale in (("depth", 2000.0, 1000.0), ("temperature", 11.0, 1.5)):
        layer = demo.prepared.layers[name]
        z = (layer.values[..., 0] - centre) / scale
        for power, part in enumerate(("linear", "squared")[: 1 + (name == "temperature")], 1):
            potential = z**power
            along_y, along_x = np.gradient(potential, layer.spacing_km, axis=(1, 2))
            inside = layer.covered & ~layer.filled
            rms = np.sqrt((along_x**2 + along_y**2)[:, inside].mean())
            prior = by_name[f"preference.{name}.{part}"]
            assert prior.prior_sd * rms == pytest.approx(3.0, rel=1e-12)
            assert (prior.prior_mean, prior.start, prior.reach) == (0.0, 0.0, prior.prior_sd)
    assert by_name["preference.colony.distance"].prior_sd == 3.0
    drift, scale = by_name["current.drift"], by_name["error_scale"]
    assert (drift.prior_mean, drift.prior_sd) == DRIFT_PRIOR == (1.0, 1.0)
    assert (scale.fixed, scale.start) == (True, 0.0)


def test_priors_are_switched_off(demo, tmp_path):
    model = built(demo, tmp_path, fit__priors='"none"', errors__scale='"estimated"')
    assert all(np.isinf(p.prior_sd) for p in model.base.parameters.all)
    assert all(np.isfinite(p.reach) for p in model.base.parameters.all)
    penalty, slope = model.base.parameters.penalty(np.full(7, 5.0))
    assert (penalty, slope.tolist()) == (0.0, [0.0] * 7)


def test_fixed_and_estimated_shares_and_scales(demo, tmp_path):
    model = built(demo, tmp_path, current__drift="0.25", errors__scale="1.5")
    drift, scale = model.base.parameters.all[-2:]
    assert (drift.fixed, drift.start) == (True, 0.25)
    assert (scale.fixed, np.exp(scale.start)) == (True, pytest.approx(1.5))
    loose = built(demo, tmp_path / "b", errors__scale='"estimated"').base.parameters.all[-1]
    assert (loose.fixed, loose.start, loose.prior_sd) == (False, 0.0, SCALE_PRIOR_LOG_SD)


def test_no_current_no_drift(demo, tmp_path):
    study = copied_demo(tmp_path / "demo")
    text = study.read_text()
    study.write_text(text.replace('[current]\nlayer = "water"\ndrift = "estimated"', ""))
    model = build_model(read_study(study), demo.prepared.layers, demo.prepared.plane)
    assert model.base.field.current is None
    assert "current.drift" not in [p.name for p in model.base.parameters.all]


def test_a_flat_layer_teaches_nothing(demo, tmp_path):
    layers = dict(demo.prepared.layers)
    depth = layers["depth"]
    layers["depth"] = dataclasses.replace(depth, values=np.full_like(depth.values, 7.0))
    with pytest.raises(LayerError, match=r"layer 'depth' \(.*depth.tif\): it has one value"):
        build_model(study_of(tmp_path), layers, demo.prepared.plane)


def test_each_track_starts_from_its_own_pace(demo, model):
    for tag, data in demo.prepared.tracks.items():
        first, *rest = model.for_track(data).parameters.all
        assert np.exp(first.start) == pytest.approx(typical_diffusion(data))
        assert tuple(rest) == model.base.parameters.all[1:]
        assert first.prior_mean == model.base.parameters.all[0].prior_mean, tag


@pytest.mark.parametrize("diffusion", [0.3, 5.0])
def test_the_typical_diffusion_of_a_walk(diffusion):
    """Half the squared step is exponential with mean s2: its median is ln 2 of that."""
    data, _ = walk(2, 4000, diffusion=diffusion, error_km=0.05, every_hours=2.0)
    # 4000 steps: 2 % by chance, and errors of 50 m are a part of short steps
    assert typical_diffusion(data) == pytest.approx(diffusion * np.sqrt(np.log(2)), rel=0.05)


rows = st.lists(
    st.tuples(st.floats(0, 100), st.floats(-500, 500), st.floats(-500, 500), st.floats(1e-3, 100)),
    min_size=1,
    max_size=8,
)


@given(rows)
def test_the_typical_diffusion_is_a_positive_number(table):
    table = np.array(sorted(table))
    data = TrackData("any", table[:, 0], table[:, 1:3], isotropic(table[:, 3]))
    found = typical_diffusion(data)
    assert np.isfinite(found)
    assert found > 0


def test_no_pace_from_fixes_of_one_moment():
    data = TrackData("still", np.zeros(3), np.arange(6.0).reshape(3, 2), isotropic(np.ones(3)))
    assert typical_diffusion(data) == 1.0
