"""A second opinion on flow lines, from numpy, scipy and statsmodels.

Prints one JSON object: seeded random flow lines with what these libraries make
of them, flow lines with errors in drops and in water contents, and quantiles of
Student's t. Shares no code with the program.
"""

import json

import numpy as np
import statsmodels.api as sm
from scipy import odr, stats

LINES = 200
SEED = 25


def line(rng):
    """Readings of one flow line: whole drops, water contents in percent."""
    n = int(rng.integers(3, 9))
    while True:
        drops = rng.integers(10, 51, size=n)
        if len(set(drops.tolist())) >= 3:
            break
    slope = -rng.uniform(2.0, 60.0)
    limit = rng.uniform(18.0, 180.0)
    noise = rng.choice([0.02, 0.15, 1.0])
    x = np.log10(drops.astype(float))
    w = limit + slope * (x - np.log10(25.0)) + rng.normal(0.0, noise, size=n)
    return drops, w


def opinion(drops, w):
    x = np.log10(drops.astype(float))
    x0 = np.log10(25.0)
    fit = stats.linregress(x, w)
    # Centred on 25 drops the intercept is the limit itself, so its standard
    # error holds the covariance of slope and intercept.
    model = sm.OLS(w, sm.add_constant(x - x0)).fit()
    at = model.get_prediction(np.array([[1.0, 0.0]])).summary_frame(alpha=0.05)
    return {
        "points": [[int(d), float(v)] for d, v in zip(drops, w)],
        "limit": float(at["mean"].iloc[0]),
        "slope": float(fit.slope),
        "residual_sd": float(np.sqrt(model.mse_resid)),
        "u": float(at["mean_se"].iloc[0]),
        "low": float(at["mean_ci_lower"].iloc[0]),
        "high": float(at["mean_ci_upper"].iloc[0]),
    }


STEP, REPEATS = 0.01, 0.006


def both(rng):
    """A line on which only the readings err: masses as a balance shows them, drops to the nearest one."""
    drops = np.sort(rng.choice(np.arange(15, 36), size=int(rng.integers(3, 7)), replace=False))
    slope, limit = -rng.uniform(5.0, 30.0), rng.uniform(25.0, 90.0)
    soil = rng.uniform(8.0, 14.0)
    tare = rng.uniform(18.0, 24.0, size=len(drops))
    w = limit + slope * np.log10(drops / 25.0)
    wet, dry = np.round(tare + soil * (1 + w / 100), 6), np.round(tare + soil, 6)
    tare = np.round(tare, 6)
    w = 100 * (wet - dry) / (dry - tare)
    # Numerical derivatives, so that no formula is shared.
    u = np.sqrt(STEP**2 / 12 + REPEATS**2)
    water = lambda t, a, d: 100 * (a - d) / (d - t)
    h = 1e-4
    parts = [
        (water(tare + h, wet, dry) - water(tare - h, wet, dry)) / (2 * h),
        (water(tare, wet + h, dry) - water(tare, wet - h, dry)) / (2 * h),
        (water(tare, wet, dry + h) - water(tare, wet, dry - h)) / (2 * h),
    ]
    sy = u * np.sqrt(sum(p**2 for p in parts))
    x = np.log10(drops / 25.0)
    sx = (np.log10((drops + 0.5) / 25.0) - np.log10((drops - 0.5) / 25.0)) / np.sqrt(12)
    fit = odr.ODR(odr.RealData(x, w, sx=sx, sy=sy), odr.unilinear, beta0=[slope, limit]).run()
    # Ordinary least squares of readings drawn anew: the program's own estimator.
    n = 40000
    xs = np.log10((drops + rng.uniform(-0.5, 0.5, size=(n, len(drops)))) / 25.0)
    err = lambda: rng.uniform(-STEP / 2, STEP / 2, size=(n, len(drops))) + rng.normal(0, REPEATS, size=(n, len(drops)))
    ys = water(tare + err(), wet + err(), dry + err())
    dx = xs - xs.mean(axis=1, keepdims=True)
    b = (dx * ys).sum(axis=1) / (dx**2).sum(axis=1)
    drawn = ys.mean(axis=1) - b * xs.mean(axis=1)
    return {
        "drops": [int(d) for d in drops],
        "masses": [[f"{t:.6f}", f"{a:.6f}", f"{d:.6f}"] for t, a, d in zip(tare, wet, dry)],
        "limit": float(fit.beta[1]),
        "u": float(np.sqrt(fit.cov_beta[1, 1])),
        "u_drawn": float(drawn.std(ddof=1)),
    }


def main():
    rng = np.random.default_rng(SEED)
    lines = [opinion(*line(rng)) for _ in range(LINES)]
    freedoms = list(range(1, 61)) + [100, 500, 999, 1000, 1001, 5000, 100000]
    student = [
        {"confidence": c, "freedom": f, "t": float(stats.t.ppf((1.0 + c) / 2.0, f))}
        for f in freedoms
        for c in (0.5, 0.9, 0.95, 0.99)
    ]
    print(json.dumps({"lines": lines, "both": [both(rng) for _ in range(25)], "student": student}))


if __name__ == "__main__":
    main()
