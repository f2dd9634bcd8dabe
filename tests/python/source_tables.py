"""Source tables in three formats, read by the csv module and astropy with every warning an error."""

import csv
import os
import warnings

import numpy as np
from astropy import units
from astropy.io import fits, votable
from astropy.table import Table

from checks import Checks, load

warnings.simplefilter("error")
data = load()
path = lambda name: os.path.join(data["folder"], name)
checks = Checks()
names = [column["name"] for column in data["columns"]]

with open(path("sources.csv"), encoding="utf-8", newline="") as file:
    rows = list(csv.DictReader(file))
checks.true("CSV: columns", list(rows[0]) == names, list(rows[0]))
contract = "name ra_deg dec_deg flux_jy flux_error_jy peak_jy_per_beam noise_jy_per_beam response".split()
checks.true("CSV: the columns that are promised come first", names[:8] == contract, names)
checks.true("CSV: name", rows[0]["name"] == '<EV> & "J", ü', rows[0]["name"])
checks.true("CSV: remarks", rows[0]["remarks"] == 'one, "two"; three < 4 & 5', rows[0]["remarks"])
checks.true("CSV: nothing is empty", rows[2]["flux_jy"] == "" and rows[2]["pointings"] == "0", rows[2])

with open(path("sources.vot"), "rb") as file:
    document = votable.parse(file, verify="exception")
checks.true("VOTable: version", document.version == "1.4", document.version)
table = document.get_first_table()
checks.true("VOTable: columns", [f.name for f in table.fields] == names)
checks.true("VOTable: UCDs", all(votable.ucd.check_ucd(f.ucd, check_controlled_vocabulary=False) for f in table.fields))
vo = table.to_table()
with fits.open(path("sources.fits")) as hdus:
    hdus.verify("exception")
    checks.true("FITS: columns", hdus[1].columns.names == names, hdus[1].columns.names)
    checks.true("FITS: EXTNAME", hdus[1].header["EXTNAME"] == "SOURCES")
ft = Table.read(path("sources.fits"), format="fits")

for column in data["columns"]:
    name, unit = column["name"], units.Unit(column["unit"])
    for kind, one in (("VOTable", vo), ("FITS", ft)):
        found = one[name].unit
        same = (found is None and unit == units.dimensionless_unscaled) or found == unit
        checks.true(f"{kind}: unit of {name}", same, f"{found} is not {unit}")
    for at, row in enumerate(rows):
        values = []
        for one in (vo, ft):
            value = one[name][at]
            values.append(None if np.ma.is_masked(value) else value)
        if row[name] == "" and name not in ("name", "remarks"):
            empty = all(value is None or np.isnan(value) for value in values)
            checks.true(f"{name}, row {at}: not measured", empty, values)
        elif name in ("name", "method", "remarks"):
            ascii_name = row[name].replace("ü", "?")
            checks.true(f"{name}, row {at}", [str(v or "").rstrip() for v in values] == [row[name], ascii_name], values)
        else:
            checks.close(f"{name}, row {at}", [float(v) for v in values], [float(row[name])] * 2, 0.0)
with open(path("none.csv"), encoding="utf-8", newline="") as file:
    checks.true("no sources: CSV has a heading", next(csv.reader(file)) == names)
checks.true("no sources: VOTable", len(votable.parse_single_table(path("none.vot"), verify="exception").array) == 0)
with fits.open(path("none.fits")) as hdus:
    hdus.verify("exception")
    checks.true("no sources: FITS", len(hdus[1].data) == 0)

with open(path("covariance.csv"), encoding="utf-8", newline="") as file:
    matrix = list(csv.reader(file))
checks.true("covariance: heading", matrix[0][1:] == [row["name"] for row in rows], matrix[0])
checks.close("covariance", [float(matrix[1][2]), float(matrix[2][1]), float(matrix[2][2])], [1.1, 1.1, 2.1], 1e-15)
checks.true("covariance: what was not measured is empty", matrix[3][1:] == ["", "", ""], matrix[3])
checks.finish()
