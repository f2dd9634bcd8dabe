"""A file of `evensky simulate`, opened by astropy with every warning an error, and its visibilities summed by numpy.

Arguments: a JSON file {"file", "rows", "components": [{"ra_deg", "dec_deg", "flux_jy", "reference_hz",
"spectral_index"}], "stations": [names], "site": [longitude deg, latitude deg, height m], "east_north_up": [[m, m, m]],
"sources": [{"name", "ra_deg", "dec_deg"}]}. Stations have no beams (unity).
"""

import warnings

import erfa
import numpy as np
from astropy.coordinates import EarthLocation
from astropy.io import fits

from checks import Checks, load

warnings.simplefilter("error")
LIGHT = 299792458.0

checks = Checks()
case = load()
with fits.open(case["file"]) as hdus:
    hdus.verify("exception")
    names = [hdu.name for hdu in hdus[1:]]
    needed = ["ARRAY_GEOMETRY", "ANTENNA", "FREQUENCY", "SOURCE", "UV_DATA"]
    checks.true("tables", sorted(names) == sorted(needed), names)
    array, sources, data = hdus["ARRAY_GEOMETRY"], hdus["SOURCE"].data, hdus["UV_DATA"]
    rows = data.data
    checks.true("rows", len(rows) == case["rows"], len(rows))
    checks.true("stations", list(array.data["ANNAME"]) == case["stations"], list(array.data["ANNAME"]))

    # where the stations stand: from the layout by the definition of East, North, up at a geodetic place
    longitude, latitude = np.radians(case["site"][:2])
    place = EarthLocation.from_geodetic(case["site"][0], case["site"][1], case["site"][2])
    origin = np.array([place.x.value, place.y.value, place.z.value])
    east = [-np.sin(longitude), np.cos(longitude), 0]
    up = [np.cos(latitude) * np.cos(longitude), np.cos(latitude) * np.sin(longitude), np.sin(latitude)]
    axes = np.array([east, np.cross(up, east), up])
    positions = origin + np.array(case["east_north_up"]) @ axes
    centre = np.array([array.header[f"ARRAY{axis}"] for axis in "XYZ"])
    checks.close("station positions, m", array.data["STABXYZ"] + centre, positions, 1e-8)
    checks.true("sources", list(sources["SOURCE"]) == [s["name"] for s in case["sources"]], list(sources["SOURCE"]))
    for column, key in [("RAEPO", "ra_deg"), ("DECEPO", "dec_deg"), ("RAOBS", "ra_deg"), ("DECOBS", "dec_deg")]:
        checks.close(f"source {column}, deg", sources[column], [s[key] for s in case["sources"]], 1e-12)

    # the axes of the data array, slowest first: DEC, RA, BAND, FREQ, STOKES, COMPLEX
    shape = [data.header[f"MAXIS{n}"] for n in range(data.header["MAXIS"], 0, -1)]
    axis = {data.header[f"CTYPE{n}"]: n for n in range(1, data.header["MAXIS"] + 1)}
    flux = np.asarray(rows["FLUX"], dtype=float).reshape([len(rows)] + shape).squeeze()
    channels = np.arange(data.header[f"MAXIS{axis['FREQ']}"])
    hz = data.header[f"CRVAL{axis['FREQ']}"] + channels * data.header[f"CDELT{axis['FREQ']}"]
    first, second = rows["BASELINE"] // 256, rows["BASELINE"] % 256
    # seconds, first minus second station: turned into metres, second minus first
    uvw = -LIGHT * np.stack([rows["UU"], rows["VV"], rows["WW"]], axis=1)
    which = rows["SOURCE_ID"] - 1
    ra, dec = np.radians(sources["RAEPO"]), np.radians(sources["DECEPO"])

    # baselines: Earth-fixed to ICRS by erfa, TT − UTC 69.184 s, UT1 = UTC, no polar motion
    date, time = np.asarray(rows["DATE"], dtype=float), np.asarray(rows["TIME"], dtype=float)
    to_earth = erfa.c2t06a(date, time + 69.184 / 86400, date, time, 0.0, 0.0)
    baseline = positions[second - 1] - positions[first - 1]
    celestial = np.einsum("kji,kj->ki", to_earth, baseline)
    outward = erfa.s2c(ra, dec)[which]
    east = np.stack([-np.sin(ra), np.cos(ra), 0 * ra], axis=1)[which]
    north = np.cross(outward, east)
    want = np.stack([np.sum(celestial * a, axis=1) for a in (east, north, outward)], axis=1)
    checks.close("u, v, w, m", uvw, want, 1e-9 * np.max(np.linalg.norm(baseline, axis=1)) + 1e-8)

    model = np.zeros((len(rows), len(hz)), dtype=complex)
    for s in case["components"]:
        sra, sdec = np.radians([s["ra_deg"], s["dec_deg"]])
        l = np.cos(sdec) * np.sin(sra - ra)
        m = np.sin(sdec) * np.cos(dec) - np.cos(sdec) * np.sin(dec) * np.cos(sra - ra)
        n1 = np.sqrt(1 - l * l - m * m) - 1
        path = np.sum(uvw * np.stack([l, m, n1], axis=1)[which], axis=1)
        spectrum = s["flux_jy"] * (hz / s["reference_hz"]) ** s["spectral_index"]
        model += spectrum * np.exp(-2j * np.pi * path[:, None] * hz / LIGHT)
    # rounding to single precision: 6e-8 of the fluxes' sum in each part
    bound = 1.5e-7 * sum(abs(s["flux_jy"]) for s in case["components"])
    for hand in range(2):
        got = flux[:, :, hand, 0] + 1j * flux[:, :, hand, 1]
        checks.close(f"visibilities of hand {hand}, real, Jy", got.real, model.real, bound)
        checks.close(f"visibilities of hand {hand}, imaginary, Jy", got.imag, model.imag, bound)
    checks.close("weights, 1/Jy²", flux[..., 2], np.ones_like(flux[..., 2]), 0.0)
checks.finish()
