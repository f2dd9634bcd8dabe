"""fits::celestial_axes against astropy.wcs: the same FITS headers, read by both.

Arguments: a JSON file {"cases": [{"name", "file", "pixels": [[x, y]], "sky_deg": [[ra, dec]], "back": [[x, y]]}]}; pixels are
those of the two celestial axes in the order of the file, counted from 0.
"""

import warnings

import numpy as np
from astropy.io import fits
from astropy.wcs import WCS

from checks import Checks, load, numbers

checks = Checks()
for case in load()["cases"]:
    with warnings.catch_warnings():
        # old keywords (EPOCH, RADECSYS) are mended with a warning
        warnings.simplefilter("ignore")
        wcs = WCS(fits.getheader(case["file"]))
    celestial = sorted([wcs.wcs.lng, wcs.wcs.lat])
    pixels, sky = numbers(case["pixels"]), numbers(case["sky_deg"])
    # the other axes have one pixel
    full = np.zeros((len(pixels), wcs.naxis))
    full[:, celestial] = pixels
    theirs = wcs.wcs_pix2world(full, 0)[:, [wcs.wcs.lng, wcs.wcs.lat]]
    world = wcs.wcs_pix2world(full, 0)
    world[:, [wcs.wcs.lng, wcs.wcs.lat]] = sky
    pixel_of_ours = wcs.wcs_world2pix(world, 0)[:, celestial]
    # 1e-6 pixel: rounding of degrees (3e-14) over pixels of 1e-5 degrees and more is 1e-8
    checks.close(f"{case['name']}: pixel to sky, in pixels", pixel_of_ours, pixels, 1e-6)
    checks.close(f"{case['name']}: sky to pixel", case["back"], pixels, 1e-6)
    # and without their inverse: directions as vectors
    a, b = np.radians(theirs), np.radians(sky)
    vector = lambda d: np.stack([np.cos(d[:, 1]) * np.cos(d[:, 0]), np.cos(d[:, 1]) * np.sin(d[:, 0]), np.sin(d[:, 1])])
    # rounding; the slant SIN is a quadratic equation in either program, a few digits are lost
    checks.close(f"{case['name']}: direction, rad", vector(a), vector(b), 1e-12)
checks.finish()
