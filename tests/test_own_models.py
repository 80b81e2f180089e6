"""Models that all rules on a window share are those that each would have fitted by itself."""

import gc
import weakref

import numpy as np
import pytest
from processes import make

from sercheck.serial.autoregression import burg
from sercheck.serial.own_models import OwnModels, alone

EXACT = {"rtol": 1e-9, "atol": 1e-12}


@pytest.fixture(scope="module")
def panel():
    """Series with and without an echo of a day, with high and low orders, complete and with gaps."""
    kinds = (("seasonal_ar", 40), ("ar0.6", 40), ("ar0.6; lost clusters", 20))
    return np.concatenate([make(kind, 41, series, 336) for kind, series in kinds])


def test_models_of_several_lags_are_those_of_each(panel):
    """Whatever was asked before: models, innovations, echoes and roots are those of a search of its own."""
    shared = OwnModels(panel)
    for longest in (1, 24, 2, 40):
        told, fresh = shared.alone(longest), alone(panel, longest)
        np.testing.assert_array_equal(told.model.order, fresh.model.order)
        np.testing.assert_array_equal(told.wanders, fresh.wanders)
        np.testing.assert_array_equal(told.far, fresh.far)
        width = min(told.model.reflection.shape[1], fresh.model.reflection.shape[1])
        for one, other in ((told, fresh), (fresh, told)):
            assert not one.model.reflection[:, width:].any()
            np.testing.assert_allclose(
                one.model.coefficients[:, :width], other.model.coefficients[:, :width], **EXACT
            )
        np.testing.assert_allclose(told.residuals.e, fresh.residuals.e, **EXACT)
        weights = np.tile(0.5 ** np.arange(120.0), (len(panel), 1))
        n = np.full(len(panel), 336)
        np.testing.assert_allclose(
            told.residuals.robust_variance(weights, n), fresh.residuals.robust_variance(weights, n), rtol=1e-8
        )
    assert (shared.alone(1).far > 0).sum() > 20


def test_a_unit_changes_the_variance_alone(panel):
    """Windows divided by powers of two have the same models, variances in the new unit, and the same echoes."""
    unit = np.ldexp(1.0, np.arange(len(panel)) % 5)
    models = OwnModels(panel).in_unit(unit)
    told, fresh = models.burg(20), burg(panel / unit[:, None], max_order=20)
    np.testing.assert_allclose(told.variance, fresh.variance, rtol=1e-9)
    np.testing.assert_allclose(told.mean, fresh.mean, **EXACT)
    np.testing.assert_array_equal(models.echoes(16)[0], OwnModels(panel).echoes(16)[0])


def test_nothing_is_held_once_a_block_is_judged(panel):
    """No circle of references keeps the arrays of a block until somebody collects garbage."""
    gc.disable()
    try:
        models = OwnModels(panel)
        other = models.in_unit(np.ones(len(panel)))
        models.alone(1), models.alone(24), other.echoes(16)
        held = weakref.ref(models)
        del models, other
        assert held() is None
    finally:
        gc.enable()
