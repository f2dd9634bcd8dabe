"""The FITS files of an output folder, opened by astropy with every warning an error.

Arguments: a JSON file {"folder", "ra_deg", "dec_deg", "width", "height", "pixel_arcsec", "images": [names]}.
"""

import os
import warnings

import numpy as np
from astropy.io import fits
from astropy.wcs import WCS

from checks import Checks, load

warnings.simplefilter("error")

REQUIRED = ["BUNIT", "RESTFRQ", "OBJECT", "HISTORY", "CTYPE1", "CTYPE2", "CRVAL1", "CRVAL2", "CDELT1", "CDELT2"]
BEAM = ["BMAJ", "BMIN", "BPA"]


def closed_form(ra, dec, ra0, dec0):
    """Direction cosines of the orthographic projection; angles in degrees."""
    ra, dec, ra0, dec0 = np.radians([ra, dec, ra0 + 0 * ra, dec0 + 0 * dec])
    l = np.cos(dec) * np.sin(ra - ra0)
    m = np.sin(dec) * np.cos(dec0) - np.cos(dec) * np.sin(dec0) * np.cos(ra - ra0)
    return l, m


checks = Checks()
case = load()
for name in case["images"]:
    path = os.path.join(case["folder"], name)
    with fits.open(path) as hdus:
        hdus.verify("exception")
        header, data = hdus[0].header, hdus[0].data
        missing = [key for key in REQUIRED if key not in header]
        checks.true(f"{name}: keywords", not missing, f"missing {missing}")
        if header.get("BUNIT", "").strip().lower() == "jy/beam":
            missing = [key for key in BEAM if key not in header]
            checks.true(f"{name}: beam", not missing, f"missing {missing}")
            checks.true(f"{name}: BMAJ ≥ BMIN > 0", header["BMAJ"] >= header["BMIN"] > 0)
        shape = data.shape[-2:]
        checks.true(f"{name}: shape", shape == (case["height"], case["width"]), shape)
        checks.true(f"{name}: leading axes of length 1", all(n == 1 for n in data.shape[:-2]), data.shape)
        checks.true(f"{name}: some pixels are not blank", bool(np.isfinite(data).any()))
        wcs = WCS(header).celestial
        checks.true(f"{name}: ICRS", header.get("RADESYS", "").strip() == "ICRS", header.get("RADESYS"))
        random = np.random.default_rng(5)
        pixels = random.uniform([0, 0], [case["width"] - 1, case["height"] - 1], size=(500, 2))
        sky = wcs.wcs_pix2world(pixels, 0)
        l, m = closed_form(sky[:, 0], sky[:, 1], case["ra_deg"], case["dec_deg"])
        step = np.radians(case["pixel_arcsec"] / 3600)
        want = np.stack([case["width"] // 2 - l / step, case["height"] // 2 + m / step], axis=1)
        checks.close(f"{name}: pixel of a direction", pixels, want, 1e-3)
checks.finish()
