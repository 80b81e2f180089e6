"""Burg's autoregressions of many series at once."""

import numpy as np
import pytest
from naive import autoregression as naive
from processes import autoregressive
from reference_values import closed, series, told

from sercheck.serial import autoregression as module
from sercheck.serial import reflections
from sercheck.serial.autoregression import (
    Autoregression,
    burg,
    impose_autocorrelation,
    innovations,
    largest_order,
    largest_root,
    model_autocorrelation,
    root_beyond,
    step_up,
)
from sercheck.serial.burg_products import reflections_from_products


def model_of(*coefficients):
    """A model with these coefficients, its reflection coefficients by the step-down recursion."""
    a = np.array(coefficients, dtype=float)
    p = len(a)
    reflection = np.zeros(p)
    while len(a):
        k = reflection[len(a) - 1] = a[-1]
        a = (a[:-1] + k * a[-2::-1]) / (1 - k * k)
    one = np.ones(1)
    order = np.array([p])
    return Autoregression(order, np.array([coefficients], dtype=float), reflection[None], one, 0 * one, order, order)


@pytest.mark.parametrize("name, what, expected", told("ar_burg_coef"))
def test_r_burg_coefficients(name, what, expected):
    """R's ar.burg (4.2.2) at the order that R chose (by AIC, where AICc may choose less)."""
    order = expected.size
    if order == 0:
        assert burg(series(name), max_order=0).order == 0
        return
    model = burg(series(name), max_order=order, min_order=order)
    assert model.order == order
    # a recursion of order 26 with a root at .9997 loses four digits of the sixteen
    np.testing.assert_allclose(model.coefficients[0], np.atleast_1d(expected), rtol=1e-9)


def test_order_by_aicc():
    """The order chosen has the smallest AICc of all that are tried, whatever the series."""
    x = np.vstack(
        [autoregressive(seed, 1, 75, phi) for seed, phi in enumerate(([0.0], [0.9], [1.5, -0.75], [0, 0, 0.6]))]
    )
    chosen = burg(x)
    for row, order in zip(x, chosen.order, strict=True):
        k = np.array(naive.burg(row, largest_order(75)))
        variance = np.var(row) * np.concatenate([[1], np.cumprod(1 - k**2)])
        aicc = [naive.corrected_criterion(v, 75, p) for p, v in enumerate(variance)]
        assert order == np.argmin(aicc)
    assert chosen.order[3] == 3


@pytest.mark.parametrize("missing", [0.0, 0.03, 0.3])
def test_twin(missing):
    """The block recursion equals plain loops over one series, with gaps and without."""
    rng = np.random.default_rng(8)
    x = autoregressive(3, 5, 80, [1.2, -0.5]) + 7
    x[rng.random(x.shape) < missing] = np.nan
    model = burg(x, max_order=4, min_order=4)
    for row, order, reflection, a, mean in zip(
        x, model.order, model.reflection, model.coefficients, model.mean, strict=True
    ):
        slow = naive.burg(row, int(order))
        np.testing.assert_allclose(reflection[:order], slow, rtol=1e-9, atol=1e-12)
        np.testing.assert_allclose(a[:order], naive.coefficients(slow), rtol=1e-9, atol=1e-12)
        e = innovations(row, model.rows([int(np.flatnonzero(model.mean == mean)[0])]))[0]
        np.testing.assert_allclose(e, naive.innovations(row, mean, a[:order]), rtol=1e-9, atol=1e-12)
    assert (model.order == 4).all() or missing > 0.1


def test_products_give_what_passes_over_the_series_give():
    """The recursion on lagged products equals Burg's own passes, and leaves to them what it cannot compute well."""
    walk = np.cumsum(autoregressive(5, 6, 400, 0.3), axis=1)
    x = np.vstack([autoregressive(4, 6, 400, [1.4, -0.6]), walk, np.sin(0.3 * np.arange(400))])
    x -= x.mean(axis=1, keepdims=True)
    for width in (1, 8, 26):
        k, exact = reflections_from_products(x, width)
        np.testing.assert_allclose(k[exact], reflections._lattice(x, width)[exact], rtol=0, atol=1e-11)
        assert exact[:12].all()
        assert exact[12] == (width == 1)


def test_blocks_do_not_matter(monkeypatch):
    """Each series is fitted by itself, however many are worked on at a time and whatever stands beside it."""
    x = autoregressive(4, 30, 60, 0.5)
    x[::3, 10:14] = np.nan
    whole = burg(x)
    for place in (module, reflections):
        monkeypatch.setattr(place, "BLOCK", 60 * 7)
    for again, rows in ((burg(x), slice(None)), (burg(x[::4]), slice(None, None, 4))):
        np.testing.assert_array_equal(again.order, whole.order[rows])
        width = min(again.coefficients.shape[1], whole.coefficients.shape[1])
        np.testing.assert_allclose(again.coefficients[:, :width], whole.coefficients[rows, :width], rtol=1e-10)


def test_unit_and_level_do_not_matter():
    """Order and coefficients are the same for any scale and shift, the variance follows the squared unit."""
    x = autoregressive(6, 4, 200, [0.5, 0.3])
    base = burg(x)
    for scale, shift in ((1e150, 0), (2.0**-900, 0), (-3.0, 100.0)):
        model = burg(x * scale + shift)
        np.testing.assert_array_equal(model.order, base.order)
        np.testing.assert_allclose(model.coefficients, base.coefficients, rtol=1e-9, atol=1e-12)
    np.testing.assert_allclose(burg(x * 8).variance, base.variance * 64, rtol=1e-12)


def test_nothing_to_fit():
    """Constant, empty and very short series get white noise of unknown variance, and no innovations."""
    x = np.full((4, 12), np.nan)
    x[0] = 5.0
    x[1, 4] = 1.0
    x[2, 3:5] = [1.0, 2.0]
    model = burg(x)
    np.testing.assert_array_equal(model.order, 0)
    assert np.isnan(model.variance).tolist() == [True, True, False, True]
    assert np.isnan(innovations(x, model)).sum() == 48 - 2
    assert burg(np.empty((3, 0))).order.tolist() == [0, 0, 0]


def test_gaps_limit_the_order():
    """No order is tried whose complete stretches are fewer than what a third of the length means without gaps."""
    x = autoregressive(9, 1, 300, [0.9])
    x[:, 1::3] = np.nan
    x[:, 2::3] = np.nan
    model = burg(x)
    assert model.reached.tolist() == [0]
    x = autoregressive(9, 1, 300, [1.5, -0.75])
    x[:, ::5] = np.nan
    model = burg(x)
    assert model.reached[0] == 3
    np.testing.assert_allclose(model.coefficients[0, :2], [1.5, -0.75], atol=0.15)


def test_default_orders():
    """Highest order min(10 log10 n, n/3), at least two above a lag beyond the first."""
    assert [largest_order(n) for n in (2, 9, 48, 168, 1000)] == [0, 3, 16, 22, 30]
    assert largest_order(200, 1) == largest_order(200) == 23
    assert largest_order(200, 24) == 26


@pytest.mark.parametrize(
    "row", [r for r in closed("acf_theory") if "AR(2)" in r["process"]], ids=lambda r: str(r["phi1"])
)
def test_theoretical_autocorrelations(row):
    """AR(2) models have the autocorrelations of Box and Jenkins, far beyond their order."""
    rho = model_autocorrelation(model_of(row["phi1"], row["phi2"]), len(row["acf"]))
    np.testing.assert_allclose(rho[0], [1, *row["acf"]], rtol=1e-12, atol=1e-15)


@pytest.mark.parametrize("row", [r for r in closed("acf_theory") if "Phi" in r], ids=lambda r: str(r["season"]))
def test_theoretical_seasonal_autocorrelations(row):
    """Multiplicative seasonal models, written out as long autoregressions."""
    s, phi, seasonal = row["season"], row["phi"], row["Phi"]
    a = np.zeros(s + 1)
    a[0], a[s - 1], a[s] = phi, seasonal, -phi * seasonal
    rho = model_autocorrelation(model_of(*(a if phi else a[:s])), len(row["acf"]))
    np.testing.assert_allclose(rho[0, 1:], row["acf"], rtol=1e-10, atol=1e-13)


@pytest.mark.parametrize("row", [r for r in closed("acf_theory") if r["process"].startswith(("MA", "ARMA"))])
def test_long_autoregressions_stand_for_moving_averages(row):
    """The reflection coefficients of moving averages are their partial autocorrelations, and give back ρ."""
    if "pacf_lag1_to_6" in row:
        partial = np.array(row["pacf_lag1_to_6"])
        model = model_of(*step_up(partial[None])[0])
        rho = model_autocorrelation(model, 6)[0, 1:]
        np.testing.assert_allclose(rho, row["acf"][:6], rtol=1e-9, atol=1e-12)
    elif row["phi"] == -row["theta"]:
        np.testing.assert_array_equal(row["acf"], 0.0)
    else:
        # (1 + θB)^-1 (1 - φB), written out until θ^j is below rounding
        a = (row["phi"] + row["theta"]) * (-row["theta"]) ** np.arange(60)
        rho = model_autocorrelation(model_of(*a), len(row["acf"]))[0, 1:]
        np.testing.assert_allclose(rho, row["acf"], rtol=1e-9, atol=1e-12)


@pytest.mark.parametrize("lag", [1, 2, 5, 24])
@pytest.mark.parametrize("b", [-0.3, 0.0, 0.2])
def test_imposed_autocorrelation(lag, b):
    """A model bent to a bound has exactly that autocorrelation at the lag and is still stationary."""
    model = burg(autoregressive(lag, 50, 300, 0.3), max_order=largest_order(300, lag))
    bent = impose_autocorrelation(model, lag, b)
    rho = model_autocorrelation(bent, lag)
    np.testing.assert_allclose(rho[:, lag], b, atol=1e-12)
    assert not root_beyond(bent, 1.0).any()


@pytest.mark.parametrize("lag", [2, 3, 6])
def test_imposed_on_ar1(lag):
    """An AR(1) fitted with .95 and bent to what .9 has at a later lag becomes AR(1) with about .9."""
    bent = impose_autocorrelation(model_of(0.95), lag, 0.9**lag)
    np.testing.assert_allclose(bent.reflection[0, 0], 0.9, atol=0.02)
    assert np.abs(bent.reflection[0, 1:]).max() < 0.1


def test_imposing_does_not_mix_series():
    """The bent model of a series is the same whatever models stand beside it."""
    model = burg(autoregressive(4, 30, 200, [1.1, -0.5, 0.2]))
    together = impose_autocorrelation(model, 4, 0.1)
    alone = impose_autocorrelation(model.rows([7]), 4, 0.1)
    np.testing.assert_allclose(together.reflection[7], alone.reflection[0], rtol=1e-12, atol=1e-15)


def test_imposing_what_cannot_be():
    """A bound that contradicts all else leaves the model stationary, and goes as near to the bound as that allows."""
    model = burg(autoregressive(2, 5, 300, 0.97))
    far = impose_autocorrelation(model, 2, -0.9)
    np.testing.assert_allclose(model_autocorrelation(far, 2)[:, 2], -0.9, atol=1e-9)
    beyond = impose_autocorrelation(model, 2, -1.5)
    np.testing.assert_allclose(np.abs(beyond.reflection[:, 1]), 0.98)
    assert not root_beyond(beyond, 1.0).any()


def test_innovations_of_gaps():
    """An innovation exists exactly where the value and all that foretell it exist."""
    x = autoregressive(1, 1, 40, 0.8)
    x[0, 20] = np.nan
    model = burg(x, max_order=2, min_order=2)
    missing = np.flatnonzero(np.isnan(innovations(x, model)[0]))
    np.testing.assert_array_equal(missing, [0, 1, 20, 21, 22])


def test_roots():
    """Largest roots are those of the polynomial, and the quick test agrees with them."""
    np.testing.assert_allclose(largest_root(model_of(1.5, -0.75)), np.sqrt(0.75))
    np.testing.assert_allclose(largest_root(model_of(0.5, 0.3)), (0.5 + np.sqrt(0.25 + 1.2)) / 2)
    x = np.vstack([autoregressive(s, 40, 120, phi) for s, phi in enumerate((0.0, 0.9, 0.97, [1.5, -0.9]))])
    model = burg(x)
    for radius in (0.5, 0.9, 0.98):
        np.testing.assert_array_equal(root_beyond(model, radius), largest_root(model) > radius)


def test_fit_finds_the_model():
    """Coefficients and innovation variance come near the truth with many rows."""
    model = burg(autoregressive(5, 20, 4000, [1.5, -0.75]))
    np.testing.assert_allclose(model.coefficients[:, :2].mean(axis=0), [1.5, -0.75], atol=0.01)
    np.testing.assert_allclose(model.variance.mean(), 1.0, atol=0.02)
    assert (model.order >= 2).all()


def test_autocorrelations_of_models_do_not_depend_on_those_beside_them():
    """To the last digit: a series is judged alike in whatever block it stands."""
    rng = np.random.default_rng(9)
    reflection = rng.uniform(-0.6, 0.6, (60, 30)) * (np.arange(30) < rng.integers(0, 31, (60, 1)))
    rho, coefficients = module._autocorrelation(reflection, 200), step_up(reflection)
    for rows in (slice(7, 8), slice(20, 25)):
        np.testing.assert_array_equal(module._autocorrelation(reflection[rows], 200), rho[rows])
        np.testing.assert_array_equal(step_up(reflection[rows]), coefficients[rows])
