"""Elliptical Gaussians fitted by scipy.optimize.least_squares to the same pixels."""

import numpy as np
from scipy.optimize import least_squares

from checks import Checks, load


def model(params, free, beam, east0, north0):
    """Sum of Gaussians; parameters per source: peak, column, row and, when free, three covariances."""
    total = np.zeros(len(east0))
    step = 6 if free else 3
    for at in range(0, len(params), step):
        peak, x, y = params[at : at + 3]
        ee, en, nn = params[at + 3 : at + 6] if free else beam
        inverse = np.linalg.inv([[ee, en], [en, nn]])
        d = np.stack([x - east0, north0 - y])
        total += peak * np.exp(-0.5 * np.einsum("ik,ij,jk->k", d, inverse, d))
    return total


def region(case, image):
    """The pixels fitted: the beam's core about each peak, and the islands where shapes are free."""
    inverse = np.linalg.inv([[case["beam"][0], case["beam"][1]], [case["beam"][1], case["beam"][2]]])
    mask = np.zeros(image.shape, bool)
    rows, columns = np.indices(image.shape)
    for x, y in case["peaks"]:
        d = np.stack([x - columns, rows - y])
        value = np.exp(-0.5 * np.einsum("iab,ij,jab->ab", d, inverse, d))
        near = (abs(columns - x) <= 1) & (abs(rows - y) <= 1)
        mask |= (value > case["core"]) | near
    if case["free"]:
        for island in case["islands"]:
            for x, y in island:
                mask[y, x] = True
    return mask


checks = Checks()
worst = {"peaks": [], "places": [], "shapes": [], "fluxes": [], "errors": []}
for case in load()["cases"]:
    image = np.array(case["image"])
    mask = region(case, image)
    y, x = np.nonzero(mask)
    free, beam = case["free"], case["beam"]
    start = []
    for px, py in case["peaks"]:
        start += [image[py, px], px, py] + (beam if free else [])
    fit = least_squares(
        lambda p: model(p, free, beam, x, y) - image[mask], start, method="lm", xtol=1e-14, ftol=1e-14, gtol=1e-14
    )
    step = 6 if free else 3
    variances = np.diag(np.linalg.inv(fit.jac.T @ fit.jac)) * case["noise"] ** 2
    for i, got in enumerate(case["fitted"]):
        want = fit.x[i * step : (i + 1) * step]
        worst["peaks"].append(got["peak"] - want[0])
        worst["places"] += list(np.array(got["centre"]) - want[1:3])
        shape = want[3:6] if free else np.array(beam)
        worst["shapes"] += list(np.array(got["covariance"]) - shape)
        area = np.sqrt((shape[0] * shape[2] - shape[1] ** 2) / (beam[0] * beam[2] - beam[1] ** 2))
        worst["fluxes"].append(got["flux"] - want[0] * area)
        worst["errors"] += list(np.array(got["variances"]) / variances[i * step : (i + 1) * step] - 1)
# both stop where the cost is flat to rounding: √1e-14 of the noise (0.05) over a few, and of the widths
checks.within("peaks, Jy", worst["peaks"], 1e-6)
checks.within("places, pixels", worst["places"], 1e-6)
checks.within("covariances, square pixels", worst["shapes"], 2e-5)
checks.within("flux densities, Jy", worst["fluxes"], 1e-5)
# scipy's derivatives are differences, good to 1e-7
checks.within("variances in white noise, relative", worst["errors"], 1e-4)
checks.finish()
