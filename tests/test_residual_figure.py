"""The page on a tag's residuals: what is drawn is what was found."""

import numpy as np
import pytest
from made_tracks import fitted, made, model_of, part
from matplotlib.collections import PathCollection

from trackfit.criticism.residuals import residuals_of
from trackfit.report import house_style, residual_figure, save_figure


def drawn(data, tag="seal $7"):
    fit = fitted(data, model_of("diffusive"))
    found = residuals_of(fit.states.approximation, ["GPS"] * len(data.hours), 1)
    hours = 475_000.0 + found.hours
    with house_style():
        figure = residual_figure(
            tag, hours, found.left_out.residual, found.quantiles, found.of_ahead, found.of_left_out
        )
        figure.canvas.draw()
    return figure, found


def points(axes):
    return np.concatenate(
        [np.asarray(c.get_offsets()) for c in axes.collections if isinstance(c, PathCollection)]
    )


def test_each_residual_is_drawn_once_in_each_of_its_panels():
    figure, found = drawn(made("persistent", 1, fixes=60))
    quantiles, in_time, ahead, left_out = figure.axes
    assert len(points(quantiles)) == len(points(in_time)) == 120
    np.testing.assert_allclose(
        np.sort(points(in_time)[:, 1]), np.sort(found.left_out.residual.ravel())
    )
    for axes, of in ((ahead, found.of_ahead), (left_out, found.of_left_out)):
        at = points(axes)[np.argsort(points(axes)[:, 0])]
        np.testing.assert_allclose(at, np.column_stack([of.lag, of.value]))
    assert figure.get_suptitle() == r"Tag seal \$7: residuals of 60 fixes"


def test_a_residual_beyond_the_panel_is_an_arrow_at_its_edge():
    data = made("diffusive", 2, fixes=60)
    data.at_km[30] += [300.0, -300.0]
    figure, found = drawn(data)
    assert np.abs(found.left_out.residual).max() > 5.0
    at = points(figure.axes[1])
    assert len(at) == 120
    assert np.abs(at[:, 1]).max() == 5.0
    assert figure.axes[1].get_ylim()[1] > 5.0


@pytest.mark.parametrize("fixes", [3, 4, 8])
def test_few_fixes_make_a_page_too(fixes, tmp_path):
    figure, _ = drawn(part(made("diffusive", 3), slice(0, fixes)))
    words = [text.get_text() for axes in figure.axes for text in axes.texts]
    # a lag needs four fixes; one step ahead the first fix does not count
    assert words.count("too few fixes") == {3: 2, 4: 1, 8: 0}[fixes]
    path = tmp_path / "page.png"
    save_figure(lambda: figure, path)
    assert path.stat().st_size > 10_000
