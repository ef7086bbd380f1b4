"""Ground told from error: what is linear, what is known, and made relief whose ground is known."""

import numpy as np
import pytest
from reference.made_relief import made_relief, with_foreign_error

from terrasol.ground.likely import TILE, Sieve, likely_heights, too_smooth
from terrasol.ground.uncertainty import DemError, error_fields

CELL = (10.0, 10.0)
ERROR = DemError(0.5, 50.0, 12, 5)


def made_ground(steepness=0.15):
    return made_relief((150, 190), 5, steepness=steepness)


def observed(truth):
    return with_foreign_error(truth, ERROR)


def gradient(z):
    return np.stack(np.gradient(np.asarray(z, float), 10.0))


def test_tiles_put_together_are_the_field_itself():
    z = made_relief((75, 101), 5)
    alone = Sieve(z.shape, np.ones_like(Sieve.of(z, ERROR, CELL).shares), 1.0)
    assert alone.ground(z) == pytest.approx(z, abs=1e-9)
    assert alone.doubt(z - 1000.0) == pytest.approx(z - 1000.0, abs=1e-9)


@pytest.mark.parametrize("shape", [(2, 2), (5, 40), (TILE, TILE), (33, 65)])
def test_a_plane_stays_a_plane_on_any_raster(shape):
    row, column = np.mgrid[: shape[0], : shape[1]]
    plane = (500.0 + 3.0 * row - 1.5 * column).astype(np.float32)
    assert Sieve.of(plane, ERROR, CELL).ground(plane) == pytest.approx(plane, abs=1e-6)


def test_likely_ground_is_nearer_the_truth_than_the_model():
    truth = made_ground()
    model = observed(truth)
    ground = Sieve.of(model, ERROR, CELL).ground(model)
    assert np.std(ground - truth) < 0.95 * np.std(model - truth)
    away, before = (np.std(gradient(z) - gradient(truth)) for z in (ground, model))
    assert away < 0.9 * before


def test_draws_scatter_as_much_as_their_mean_errs():
    """In slope, where it counts: what is drawn is as large as what is not known."""
    truth = made_ground()
    model = observed(truth)
    drawn = np.array([gradient(z) for z in likely_heights(model, ERROR, CELL)])
    error = np.std(drawn.mean(axis=0) - gradient(truth)) / np.sqrt(1.0 + 1.0 / len(drawn))
    assert np.sqrt(drawn.var(axis=0, ddof=1).mean()) == pytest.approx(error, rel=0.1)


def test_draws_are_as_rough_as_the_truth_and_the_model_is_rougher():
    truth = made_ground()
    model = observed(truth)
    steep = [np.mean(gradient(z) ** 2) for z in likely_heights(model, ERROR, CELL)]
    plain = np.mean(gradient(truth) ** 2)
    assert np.mean(steep) == pytest.approx(plain, rel=0.02)
    apart = ERROR.correlation(np.array(20.0), CELL)  # of the heights in a central difference
    added = 2.0 * ERROR.rmse**2 * (1.0 - apart) / 20.0**2
    assert np.mean(gradient(model) ** 2) == pytest.approx(plain + added, rel=0.01)
    assert added > 0.07 * plain


def test_great_relief_is_left_alone():
    """Relief far rougher than the error is ground: the draws are the model and the error."""
    z = made_ground(steepness=30.0)
    sieve = Sieve.of(z, ERROR, CELL)
    field = next(error_fields(ERROR, z.shape, CELL))
    moved = np.abs(sieve.ground(z) - z)
    half = TILE // 2
    assert moved[half:-half, half:-half].max() < 0.1
    assert moved.max() < 0.5 * ERROR.rmse  # the mirrored rim is rougher than the tiles within
    assert np.std(sieve.doubt(field) - field) < 0.05 * ERROR.rmse


def test_rims_are_sieved_as_the_ground_within():
    """What is mirrored beyond a rim is rougher than the ground; nothing of it is believed."""
    error = DemError(0.5, 50.0, 40, 5)
    alone = np.array(list(error_fields(error, (160, 160), CELL)))
    left = np.array([Sieve.of(field, error, CELL).ground(field) for field in alone])
    power = np.array([np.mean(gradient(field) ** 2, axis=0) for field in left]).mean(axis=0)
    within = power[TILE:-TILE, TILE:-TILE].mean()
    assert power[2:6].mean() == pytest.approx(within, rel=0.25)
    assert power[:, -6:-2].mean() == pytest.approx(within, rel=0.25)


def test_voids_stay_and_trouble_nobody_far_off():
    z = observed(made_ground())
    holed = z.copy()
    holed[60:70, 80:95] = np.nan
    whole, drawn = (next(likely_heights(heights, ERROR, CELL)) for heights in (z, holed))
    np.testing.assert_array_equal(np.isnan(drawn), np.isnan(holed))
    assert drawn[:20] == pytest.approx(whole[:20], abs=1e-3)
    assert drawn[60:70, 130:] == pytest.approx(whole[60:70, 130:], abs=1e-3)


def test_a_model_smoother_than_its_error_is_told():
    truth = made_ground(steepness=0.02)
    assert too_smooth(observed(truth), ERROR, CELL) is None
    said = too_smooth(observed(truth), DemError(1.5, 50.0), CELL)
    assert said is not None
    assert "1.5 m rms" in said
    assert "smaller RMSE" in said
    # Errors of 0.5 m against 1.5 m: a third as rough, and the ground adds a little.
    assert Sieve.of(observed(truth), DemError(1.5, 50.0), CELL).roughness == pytest.approx(
        1.0 / 9.0, rel=0.2
    )
