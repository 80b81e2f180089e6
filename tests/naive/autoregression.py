"""Slow and obvious twins of the autoregressions and of the formulas that rest on them."""

import math

import numpy as np


def burg(x, order):
    """Reflection coefficients of a series that may have gaps: every step looks at each place by itself."""
    mean = np.nanmean(x)
    f = [value - mean for value in x]
    b = list(f)
    reflection = []
    for _ in range(order):
        places = [t for t in range(1, len(f)) if not math.isnan(f[t] + b[t - 1])]
        over = sum(2 * f[t] * b[t - 1] for t in places)
        k = over / sum(f[t] ** 2 + b[t - 1] ** 2 for t in places)
        reflection.append(k)
        f, b = (
            [math.nan, *(f[t] - k * b[t - 1] for t in range(1, len(f)))],
            [math.nan, *(b[t - 1] - k * f[t] for t in range(1, len(f)))],
        )
    return reflection


def coefficients(reflection):
    """Levinson's recursion, one series."""
    a = []
    for k in reflection:
        a = [a[i] - k * a[len(a) - 1 - i] for i in range(len(a))] + [k]
    return a


def corrected_criterion(variance, n, order):
    """AICc = n ln(variance) + n (1 + p/n)/(1 - (p + 2)/n) (Hurvich and Tsai 1989)."""
    return n * math.log(variance) + n * (1 + order / n) / (1 - (order + 2) / n)


def innovations(x, mean, a):
    """e_t = x_t - mean - Σ a_j (x_{t-j} - mean), NaN without all of them."""
    e = []
    for t in range(len(x)):
        past = [x[t - j] - mean if t >= j else math.nan for j in range(1, len(a) + 1)]
        e.append(x[t] - mean - sum(c * p for c, p in zip(a, past, strict=True)))
    return np.array(e)


def bartlett(rho, lag):
    """The two-sided sum n var(r_k) as Bartlett (1946) gives it, ``rho`` a function of the distance."""
    return sum(
        rho(i) ** 2
        + rho(i + lag) * rho(i - lag)
        - 4 * rho(lag) * rho(i) * rho(i - lag)
        + 2 * rho(i) ** 2 * rho(lag) ** 2
        for i in range(-2000, 2001)
    )


def robust_variance(e, weights, n, order, reach):
    """[n/(n-p-1)] Σ e_t² (Σ_{j<=J} W_j e_{t-j})² / (Σ e_t²)², e complete from ``order`` on."""
    e = np.where(np.isnan(e), 0.0, e)
    top = 0.0
    for t in range(len(e)):
        inner = sum(weights[j - 1] * e[t - j] for j in range(1, min(reach, t) + 1))
        top += e[t] ** 2 * inner**2
    return n / (n - order - 1) * top / sum(e**2) ** 2
