"""Sources found in an image put on the sky: against astropy.wcs and astropy.coordinates."""

import numpy as np
from astropy.coordinates import SkyCoord
from astropy.wcs import WCS

from checks import Checks, load

data = load()
wcs = WCS(naxis=2)
wcs.wcs.ctype = ["RA---SIN", "DEC--SIN"]
wcs.wcs.crval = [data["ra_deg"], data["dec_deg"]]
wcs.wcs.crpix = np.array(data["reference"]) + 1
wcs.wcs.cdelt = np.degrees(data["pixel"]) * np.array([-1, 1])
checks = Checks()
for x, y in data["pixels"]:
    want = SkyCoord(*wcs.wcs_pix2world(x, y, 0), unit="deg")
    places = SkyCoord([f["ra_deg"] for f in data["found"]], [f["dec_deg"] for f in data["found"]], unit="deg")
    at = int(np.argmin(places.separation(want)))
    found = data["found"][at]
    # a thousandth of a pixel of 8 arcseconds
    checks.within("place, arcsec", places[at].separation(want).arcsec, 0.008)
    checks.close("flux density", found["flux"], 1.0, 1e-4)
    # IAU: cut off, not rounded
    hours = places[at].ra.hms
    signed = places[at].dec.signed_dms
    name = f"EV J{int(hours.h):02}{int(hours.m):02}{int(hours.s):02}+{int(signed.d):02}{int(signed.m):02}{int(signed.s):02}"
    checks.true("name", found["name"] == name, f"{found['name']} is not {name}")
    # signal to noise 1000 and a beam of 6 by 4.5 pixels: errors of about 0.4 widths over 1000
    for axis in ("east", "north"):
        checks.within(f"error towards {axis}, of 0.4 widths over signal to noise, relative",
                      found[axis] / (0.4 * 5.2 * data["pixel"] / 1000) - 1, 0.5)
checks.finish()
