"""observation::{parallactic_angle, hour_angle_declination, baseline_uvw} against erfa, with true TT − UTC."""

import warnings

import erfa
import numpy as np

from checks import Checks, load, numbers

# years after the last leap second known to erfa are "dubious": the time scale is then the newest one
warnings.simplefilter("ignore", erfa.ErfaWarning)

ZERO = 2400000.5
cases = load()["cases"]
mjd = numbers([case["mjd_utc"] for case in cases])
ut1 = mjd + numbers([case["ut1_utc_s"] for case in cases]) / 86400.0
tt1, tt2 = erfa.taitt(*erfa.utctai(ZERO, mjd))
to_earth = erfa.c2t06a(tt1, tt2, ZERO, ut1, 0.0, 0.0)

station = numbers([case["position_m"] for case in cases])
longitude, latitude, _ = erfa.gc2gd(1, station)
aim = numbers([case["aim"] for case in cases])
seen = np.einsum("kij,kj->ki", to_earth, erfa.s2c(aim[:, 0], aim[:, 1]))
greenwich, declination = erfa.c2s(seen)
hour_angle = erfa.anpm(np.arctan2(station[:, 1], station[:, 0]) - greenwich)

checks = Checks()
# TT − UTC is held at 69.184 s in the program: up to 12 s off in 1990, which precession and nutation turn into < 1e-9 rad.
BOUND = 1e-9
got = numbers([case["hour_angle"] for case in cases])
checks.within("hour angle × cos δ, rad", erfa.anpm(got - hour_angle) * np.cos(declination), BOUND)
checks.close("declination, rad", [case["declination"] for case in cases], declination, BOUND)

# parallactic angle of date, then the position angle of the pole of date in the ICRS
of_date = erfa.hd2pa(hour_angle, declination, latitude)
pole = erfa.pnm06a(tt1, tt2)[:, 2, :]
turn = erfa.pap(erfa.s2c(aim[:, 0], aim[:, 1]), pole)
_, elevation = erfa.hd2ae(hour_angle, declination, latitude)
got = numbers([case["parallactic_angle"] for case in cases])
small = np.minimum(np.cos(elevation), np.cos(aim[:, 1]))
checks.within("parallactic angle × the smaller cosine, rad", erfa.anpm(got - of_date - turn) * small, 3 * BOUND)

baseline = numbers([case["baseline_m"] for case in cases])
celestial = np.einsum("kji,kj->ki", to_earth, baseline)
ra, dec = aim.T
east = np.stack([-np.sin(ra), np.cos(ra), 0 * ra], axis=1)
outward = erfa.s2c(ra, dec)
north = np.cross(outward, east)
want = np.stack([np.sum(celestial * axis, axis=1) for axis in (east, north, outward)], axis=1)
length = np.linalg.norm(baseline, axis=1)[:, None]
checks.within("u, v, w over the baseline", (numbers([case["uvw_m"] for case in cases]) - want) / length, BOUND)
checks.finish()
