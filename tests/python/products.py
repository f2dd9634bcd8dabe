"""The FITS files of output folders, opened by astropy with every warning an error.

Arguments: a JSON file {"cases": [{"name", "folder", "ra_deg", "dec_deg", "width", "height", "pixel_arcsec", "start_mjd",
"units": {file name: unit of its pixels as astropy writes it}}]}.
"""

import os
import warnings

import numpy as np
from astropy import units
from astropy.io import fits
from astropy.time import Time
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


def look(checks, case, file, unit):
    """Header, unit, dates, beam and sky of one product."""
    name = f"{case['name']}, {file}"
    with fits.open(os.path.join(case["folder"], file)) as hdus:
        hdus.verify("exception")
        header, data = hdus[0].header, hdus[0].data
        checks.true(f"{name}: one HDU", len(hdus) == 1, len(hdus))
        missing = [key for key in REQUIRED if key not in header]
        checks.true(f"{name}: keywords", not missing, f"missing {missing}")
        found = units.Unit(header["BUNIT"], format="fits")
        checks.true(f"{name}: BUNIT", found == units.Unit(unit), f"{header['BUNIT']!r} is {found}, not {unit}")
        # a point spread function has a beam, its unit is 1
        if unit in ("Jy / beam", ""):
            missing = [key for key in BEAM if key not in header]
            checks.true(f"{name}: beam", not missing, f"missing {missing}")
            checks.true(f"{name}: BMAJ ≥ BMIN > 0", header["BMAJ"] >= header["BMIN"] > 0)
        # DATE-OBS is printed to the millisecond: half of one, in days
        date = Time(header["DATE-OBS"], format="isot", scale=header["TIMESYS"].lower())
        checks.close(f"{name}: DATE-OBS is MJD-OBS", date.mjd, header["MJD-OBS"], 0.51e-3 / 86400)
        checks.close(f"{name}: MJD-OBS is the first time", header["MJD-OBS"], case["start_mjd"], 1e-9)
        shape = data.shape[-2:]
        checks.true(f"{name}: shape", shape == (case["height"], case["width"]), shape)
        checks.true(f"{name}: leading axes of length 1", all(n == 1 for n in data.shape[:-2]), data.shape)
        checks.true(f"{name}: 32-bit floats", header["BITPIX"] == -32, header["BITPIX"])
        checks.true(f"{name}: some pixels are not blank", bool(np.isfinite(data).any()))
        full = WCS(header)
        wcs = full.celestial
        checks.true(f"{name}: ICRS", header.get("RADESYS", "").strip() == "ICRS", header.get("RADESYS"))
        middle = full.pixel_to_world_values(case["width"] // 2, case["height"] // 2, 0, 0)
        checks.close(f"{name}: frequency axis is RESTFRQ", middle[2], header["RESTFRQ"], 1.0)
        checks.close(f"{name}: STOKES axis is I", middle[3], 1.0, 1e-12)
        random = np.random.default_rng(5)
        pixels = random.uniform([0, 0], [case["width"] - 1, case["height"] - 1], size=(500, 2))
        sky = wcs.wcs_pix2world(pixels, 0)
        l, m = closed_form(sky[:, 0], sky[:, 1], case["ra_deg"], case["dec_deg"])
        step = np.radians(case["pixel_arcsec"] / 3600)
        want = np.stack([case["width"] // 2 - l / step, case["height"] // 2 + m / step], axis=1)
        checks.close(f"{name}: pixel of a direction", pixels, want, 1e-3)


checks = Checks()
for case in load()["cases"]:
    for file, unit in case["units"].items():
        look(checks, case, file, unit)
checks.finish()
