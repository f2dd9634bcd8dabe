"""sky::ImageGeometry and sky::TangentFrame against astropy.wcs (SIN projection) and erfa (unit vectors)."""

import erfa
import numpy as np
from astropy.wcs import WCS

from checks import Checks, load, numbers


def image_wcs(case):
    """The same image in FITS terms. LONPOLE is written because its default is 0 at CRVAL2 = 90."""
    wcs = WCS(naxis=2)
    wcs.wcs.ctype = ["RA---SIN", "DEC--SIN"]
    wcs.wcs.crval = [case["ra_deg"], case["dec_deg"]]
    wcs.wcs.crpix = [case["width"] // 2 + 1, case["height"] // 2 + 1]
    step = np.degrees(case["pixel"])
    wcs.wcs.cdelt = [-step, step]
    wcs.wcs.cunit = ["deg", "deg"]
    wcs.wcs.lonpole = 180.0
    wcs.wcs.set()
    return wcs


def separation(a_deg, b_deg):
    """Angle between directions, radians."""
    a, b = np.radians(a_deg), np.radians(b_deg)
    return erfa.sepp(erfa.s2c(a[:, 0], a[:, 1]), erfa.s2c(b[:, 0], b[:, 1]))


checks = Checks()
pixel_errors, sky_errors, lm_errors, n_errors = [], [], [], []
for case in load()["geometries"]:
    wcs = image_wcs(case)
    pixels, sky = numbers(case["pixels"]), numbers(case["sky_of_pixels"])
    # a direction cosine rounded to 1e-16 is that much over n in angle
    towards = erfa.s2c(*np.radians([case["ra_deg"], case["dec_deg"]]))
    n = erfa.s2c(*np.radians(sky).T) @ towards
    sky_errors.append(separation(wcs.wcs_pix2world(pixels, 0), sky) * n)

    targets = numbers(case["targets"])
    reference = wcs.wcs_world2pix(targets, 0)
    pixel_errors.append((reference - numbers(case["pixels_of_targets"])) * case["pixel"])
    x0, y0 = case["width"] // 2, case["height"] // 2
    lmn = numbers(case["lmn_of_targets"])
    lm = np.stack([x0 - reference[:, 0], reference[:, 1] - y0], axis=1) * case["pixel"]
    lm_errors.append(lm - lmn[:, :2])
    n_errors.append(erfa.s2c(*np.radians(targets).T) @ towards - lmn[:, 2])

# Rounding: angles of up to 360 degrees carry 3e-14 degrees = 5e-16 rad, a few of which add up in either program.
checks.within("pixel to sky, rad", np.concatenate(sky_errors), 1e-14)
checks.within("sky to pixel, rad", np.concatenate(pixel_errors), 1e-14)
checks.within("l, m", np.concatenate(lm_errors), 1e-14)
checks.within("n", np.concatenate(n_errors), 1e-14)
checks.finish()
