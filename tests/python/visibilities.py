"""A FITS-IDI file and an image of the program under test, opened by astropy with every warning an error.

Arguments: a JSON file {"visibilities", "rows": {...}, "stations_m", "frequencies_hz", "image", "keywords", "pixels"}.
"""

import warnings

import numpy as np
from astropy.io import fits

from checks import Checks, load

warnings.simplefilter("error")
LIGHT = 299792458.0

checks = Checks()
case = load()
with fits.open(case["visibilities"]) as hdus:
    hdus.verify("exception")
    names = [hdu.name for hdu in hdus[1:]]
    wanted = ["ARRAY_GEOMETRY", "ANTENNA", "FREQUENCY", "SOURCE", "UV_DATA"]
    checks.true("tables", names == wanted, names)
    uv = hdus["UV_DATA"]
    rows, data = case["rows"], uv.data
    uvw = -LIGHT * np.stack([data["UU"], data["VV"], data["WW"]], axis=1)
    checks.within("u, v, w, relative", uvw / np.array(rows["uvw_m"]) - 1, 1e-9)
    # two f64 added into a Julian Date of 2.4e6 days keep 5e-10 day
    checks.close("dates", data["DATE"] + data["TIME"] - 2400000.5, rows["mjd_utc"], 1e-9)
    baseline = 256 * (np.array(rows["first"]) + 1) + np.array(rows["second"]) + 1
    checks.true("baselines", np.array_equal(data["BASELINE"], baseline))
    axes = [uv.header[f"MAXIS{n + 1}"] for n in range(uv.header["MAXIS"])]
    flux = data["FLUX"].reshape(len(data), axes[3], axes[2], axes[1], axes[0])
    checks.true("axes", [uv.header[f"CTYPE{n}"] for n in range(1, 5)] == ["COMPLEX", "STOKES", "FREQ", "BAND"])
    checks.true("array marked", uv.header["TMATX10"] and uv.columns[9].name == "FLUX")
    for plane, name in enumerate(["re", "im", "weight"]):
        got = flux[..., plane].astype("<f4").ravel()
        checks.true(f"{name} bit for bit", np.array_equal(got, np.array(rows[name], dtype="<f4")))
    table, header = hdus["FREQUENCY"].data, hdus["FREQUENCY"].header
    channel = np.arange(axes[2]) + 1 - header["REF_PIXL"]
    offsets, widths = np.atleast_1d(table["BANDFREQ"][0]), np.atleast_1d(table["CH_WIDTH"][0])
    hz = header["REF_FREQ"] + offsets[:, None] + widths[:, None] * channel
    checks.close("frequencies", hz.ravel(), case["frequencies_hz"], 1e-3)
    checks.close("stations", hdus["ARRAY_GEOMETRY"].data["STABXYZ"], case["stations_m"], 0)

with fits.open(case["image"]) as hdus:
    hdus.verify("exception")
    for key, value in case["keywords"].items():
        checks.true(key, hdus[0].header[key] == value, repr(hdus[0].header[key]))
    checks.close("pixels", hdus[0].data.ravel(), case["pixels"], 0)
checks.finish()
