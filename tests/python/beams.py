"""beam::{Airy, Gaussian, StationBeams} against scipy.special.j1 and the formulas of the measurement equation in numpy."""

import numpy as np
from scipy.optimize import brentq
from scipy.special import j1

from checks import Checks, load, numbers

C = 299792458.0


def jinc(x):
    x = np.abs(np.asarray(x, dtype=float))
    safe = np.where(x < 1e-8, 1.0, x)
    return np.where(x < 1e-8, 1.0, 2.0 * j1(safe) / safe)


def airy(case, r, hz):
    k = np.pi * np.asarray(r) * hz / C
    full, hole = case["diameter_m"] ** 2, case["blockage_m"] ** 2
    return (full * jinc(k * case["diameter_m"]) - hole * jinc(k * case["blockage_m"])) / (full - hole)


def gaussian(case, x, y, hz):
    width = case["half_power"] * case["at_hz"] / hz
    ratio = case["axis_ratio"]
    return np.exp(-2 * np.log(2) * (x**2 / (width**2 * ratio) + y**2 * ratio / width**2))


checks = Checks()
data = load()
values, widths, beyond = [], [], []
for case in data["airy"]:
    points = numbers(case["points"])
    r = np.hypot(points[:, 0], points[:, 1])
    # two nearly equal terms are subtracted when the blockage is nearly the dish: rounding grows with their sum
    full, hole = case["diameter_m"] ** 2, case["blockage_m"] ** 2
    values.append((numbers(case["voltages"]) - airy(case, r, case["hz"])) * (full - hole) / (full + hole))
    unit = C / case["hz"] / case["diameter_m"]
    half = brentq(lambda x: airy(case, x * unit, case["hz"]) ** 2 - 0.5, 0.2, 0.8, xtol=1e-14)
    widths.append(case["half_power_width"] / (2 * half * unit) - 1)
    for level, radius in case["extents"]:
        # "below the level at every radius beyond, for this and higher frequencies"
        far = radius * np.concatenate([np.linspace(1, 3, 4000), np.geomspace(3, 300, 4000)])
        beyond += [np.max(np.abs(airy(case, far, case["hz"] * up))) / level for up in (1.0, 1.07, 2.5)]
checks.within("airy voltages over what is subtracted", np.concatenate(values), 2e-15)
checks.within("airy half-power width, relative", widths, 1e-13)
checks.within("airy beyond its extent, over the level", beyond, 1.0)

values, beyond = [], []
for case in data["gaussian"]:
    points = numbers(case["points"])
    values.append(numbers(case["voltages"]) - gaussian(case, points[:, 0], points[:, 1], case["hz"]))
    for level, radius in case["extents"]:
        turn = np.linspace(0, 2 * np.pi, 721)
        for up in (1.0, 1.3):
            edge = gaussian(case, radius * np.cos(turn), radius * np.sin(turn), case["hz"] * up)
            beyond.append(np.max(edge) / level)
checks.within("gaussian voltages", np.concatenate(values), 2e-15)
checks.within("gaussian at its extent, over the level", beyond, 1.0 + 1e-12)

# station frame: x = l cos q − m sin q, y = l sin q + m cos q; the station really looks at its offset
values = []
for case in data["stations"]:
    lm = numbers(case["lm"])
    q = case["angle"]
    x = lm[:, 0] * np.cos(q) - lm[:, 1] * np.sin(q) - case["offset"][0]
    y = lm[:, 0] * np.sin(q) + lm[:, 1] * np.cos(q) - case["offset"][1]
    values.append(numbers(case["voltages"]) - gaussian(case, x, y, case["hz"]))
checks.within("offset, turned station beams", np.concatenate(values), 1e-14)
checks.finish()
