"""Sources in a mosaic of `evensky combine`, found where astropy.wcs puts them, with the beam of the header.

Arguments: a JSON file {"file", "sources": [[ra_deg, dec_deg, jy]], "weight_file", "weights": [[ra_deg, dec_deg, weight]]}.
"""

import numpy as np
from astropy.io import fits
from astropy.wcs import WCS

from checks import Checks, load, numbers

checks = Checks()
case = load()
with fits.open(case["file"]) as hdus:
    header, sky = hdus[0].header, np.squeeze(hdus[0].data).astype(float)
wcs = WCS(header).celestial
step = abs(header["CDELT2"])
along, across = header["BMAJ"] / step, header["BMIN"] / step
angle = np.radians(header["BPA"])
y, x = np.mgrid[: sky.shape[0], : sky.shape[1]]
for number, (ra, dec, jy) in enumerate(numbers(case["sources"])):
    px, py = wcs.wcs_world2pix([[ra, dec]], 0)[0]
    # East is left, North is up; the position angle runs from North through East
    east, north = -(x - px), y - py
    s, t = east * np.sin(angle) + north * np.cos(angle), east * np.cos(angle) - north * np.sin(angle)
    form = 4 * np.log(2) * ((s / along) ** 2 + (t / across) ** 2)
    near = form < 20
    values, beam = np.where(near, sky, 0), np.exp(-form)
    flux = values.sum() / (np.pi * along * across / (4 * np.log(2)))
    offset = [np.sum(values * (x - px)) / values.sum(), np.sum(values * (y - py)) / values.sum()]
    # what the run states: 3e-4 of the peak, 1e-4 of the flux density, here with room for the beams that differ from place to
    # place; 32-bit floats are 1e-7
    checks.within(f"source {number}: place, pixels", offset, 1e-2)
    checks.within(f"source {number}: difference from the beam, of the peak", (sky - jy * beam)[near] / jy, 1e-3)
    checks.within(f"source {number}: flux density, relative", flux / jy - 1, 1e-3)
with fits.open(case["weight_file"]) as hdus:
    weight = np.squeeze(hdus[0].data).astype(float)
for ra, dec, want in numbers(case["weights"]):
    px, py = np.rint(wcs.wcs_world2pix([[ra, dec]], 0)[0]).astype(int)
    # constant weights, the noise factors of the convolutions as the record states them: 32-bit floats
    checks.close("weight, relative", weight[py, px] / want, 1, 1e-6)
checks.finish()
