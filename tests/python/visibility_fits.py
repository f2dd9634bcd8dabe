"""Joint flux densities of a pointing: the matrix built here from u, v, w and Gaussian beams, solved by numpy and scipy."""

import numpy as np
from scipy.optimize import lsq_linear

from checks import Checks, load, numbers

C = 299792458.0
data = load()
sources = data["sources"]
l, m, index = (np.array([s[key] for s in sources]) for key in ("l", "m", "index"))
n1 = -(l**2 + m**2) / (1 + np.sqrt(1 - l**2 - m**2))
matrix, values = [], []
for row in data["rows"]:
    u, v, w = row["uvw_m"]
    for channel, hz in enumerate(data["frequencies_hz"]):
        power = 0.0
        widths = [data["half_power"][row[key]] * data["at_hz"] / hz for key in ("first", "second")]
        beam = np.prod([np.exp(-2 * np.log(2) * (l**2 + m**2) / width**2) for width in widths], axis=0)
        fringe = np.exp(-2j * np.pi * hz / C * (u * l + v * m + w * n1))
        model = beam * fringe * (hz / data["at_hz"]) ** index
        for hand in range(2):
            weight = row["weight"][channel * 2 + hand]
            if weight > 0:
                re, im = row["data"][channel * 2 + hand]
                for part, value in ((model.real, re), (model.imag, im)):
                    matrix.append(np.sqrt(weight) * part)
                    values.append(np.sqrt(weight) * value)
matrix, values = np.array(matrix), np.array(values)
checks = Checks()
want, *_ = np.linalg.lstsq(matrix, values, rcond=None)
covariance = np.linalg.inv(matrix.T @ matrix)
scale = np.sqrt(np.diag(covariance))
# single precision of values and weights is the same for both; rounding of normal equations: condition number × 1e-16
checks.close("flux densities against numpy.linalg.lstsq, in errors", numbers(data["flux"]) / scale, want / scale, 1e-8)
bounded = lsq_linear(matrix, values, method="bvls", tol=1e-14).x
checks.close("flux densities against scipy.optimize.lsq_linear, in errors", numbers(data["flux"]) / scale, bounded / scale, 1e-8)
got = numbers(data["covariance"])
checks.close("covariance, relative", got / np.outer(scale, scale), covariance / np.outer(scale, scale), 1e-8)
checks.true("sources overlap", np.abs(np.corrcoef(matrix.T) - np.eye(len(l))).max() > 0.1)
checks.finish()
