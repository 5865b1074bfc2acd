"""Reference values for the tests of package astro, by astropy and ERFA.

Run: /usr/bin/python3 reference.py > reference.json
"""
import json
import sys
import warnings

import numpy as np
from astropy.coordinates import Angle, SkyCoord
from astropy.time import Time

warnings.simplefilter("ignore")
rng = np.random.default_rng(20260802)

dates = ["2000-01-01", "1858-11-17", "1999-12-31T23:59:59.999", "2000-02-29T12:00:00", "1900-03-01T00:00:00",
         "2100-02-28T06:30", "2400-02-29T23:59:59.9994", "1600-02-29", "1582-10-04T01:02:03", "0001-01-01",
         "9999-12-31T23:59:59", "2024-02-29T03:04:05.123456789", "1972-01-01T00:00:00"]
for mjd in rng.uniform(-313000, 2900000, 150):
    dates.append(Time(mjd, format="mjd", scale="tai").isot)
# Years of leap seconds, on days that have none.
for mjd in rng.uniform(41317, 62000, 150):
    dates.append(Time(mjd, format="mjd", scale="tai").isot)
# A date has no scale here; TAI has 86400 s in each of its days.
times = [{"iso": d, "mjd": float(Time(d, format="isot" if "T" in d else "iso", scale="tai").mjd)} for d in dates]
# UTC itself, on days without a leap second.
for mjd in rng.uniform(58000, 62000, 100):
    t = Time(Time(mjd, format="mjd", scale="utc").isot, scale="utc")
    times.append({"iso": t.isot, "mjd": float(t.mjd)})

pairs = []
places = [(0, 0), (0, 90), (123, -90), (180, 0), (359.9999, 12), (1e-4, 12), (10, 20), (10, 20.0000001), (190, -20)]
places += [(float(a), float(np.degrees(np.arcsin(z)))) for a, z in zip(rng.uniform(0, 360, 12), rng.uniform(-1, 1, 12))]
for a in places:
    for b in places:
        p, q = SkyCoord(*a, unit="deg"), SkyCoord(*b, unit="deg")
        pairs.append({"a": a, "b": b, "separation": float(p.separation(q).deg), "angle": float(p.position_angle(q).deg)})

angles = []
for ra, dec in places + [(239.99999999, -0.00001), (359.99999999, 0.9999999)]:
    angles.append({"ra": ra, "dec": dec,
                   "hms": Angle(ra, "deg").to_string("hourangle", sep=":", pad=True, precision=3),
                   "dms": Angle(dec, "deg").to_string("deg", sep=":", pad=True, precision=2, alwayssign=True)})
json.dump({"times": times, "pairs": pairs, "angles": angles}, sys.stdout, separators=(",", ":"))
