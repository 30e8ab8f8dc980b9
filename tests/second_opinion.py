"""A second opinion on flow lines, from numpy, scipy and statsmodels.

Prints one JSON object: seeded random flow lines with what these libraries make
of them, and quantiles of Student's t. Shares no code with the program.
"""

import json

import numpy as np
import statsmodels.api as sm
from scipy import stats

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


def main():
    rng = np.random.default_rng(SEED)
    lines = [opinion(*line(rng)) for _ in range(LINES)]
    freedoms = list(range(1, 61)) + [100, 500, 999, 1000, 1001, 5000, 100000]
    student = [
        {"confidence": c, "freedom": f, "t": float(stats.t.ppf((1.0 + c) / 2.0, f))}
        for f in freedoms
        for c in (0.5, 0.9, 0.95, 0.99)
    ]
    print(json.dumps({"lines": lines, "student": student}))


if __name__ == "__main__":
    main()
