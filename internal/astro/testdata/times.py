"""Reference values for the tests of time scales and of altitudes, by astropy and ERFA.

Run: /usr/bin/python3 times.py > times.json
Each time is an instant written in several scales, and the UTC of the same instant as
a day and the seconds in it (60 and more within a leap second).
"""
import json
import sys
import warnings

import erfa
import numpy as np
from astropy.time import Time, TimeDelta

warnings.simplefilter("ignore")
rng = np.random.default_rng(20260804)

instants = [Time(mjd, format="mjd", scale="tai") for mjd in rng.uniform(36935, 62000, 300)]
for day in ("1961-08-01", "1963-11-01", "1966-01-01", "1968-02-01", "1972-01-01", "1972-07-01", "1979-01-01",
            "1985-07-01", "1996-01-01", "1999-01-01", "2006-01-01", "2009-01-01", "2012-07-01", "2015-07-01",
            "2017-01-01"):
    start = Time(day, scale="utc").tai
    for seconds in (-86399.5, -2.25, -1.001, -0.999, -0.5, -0.001, 0.001, 0.25, 1.5, 43200.0, 86399.5):
        # On the eve of a step before 1972 ERFA stretches all seconds of the day.
        if seconds > 0 or day > "1972-01-01":
            instants.append(start + TimeDelta(seconds, format="sec"))
times = []
for tai in instants:
    utc = tai.utc.ymdhms
    seconds = utc["hour"] * 3600 + utc["minute"] * 60 + utc["second"]
    day = "%04d-%02d-%02d" % (utc["year"], utc["month"], utc["day"])
    iso = {}
    for scale in ("tai", "tt", "tdb", "tcg", "tcb", "gps"):
        t = tai - TimeDelta(19.0, format="sec") if scale == "gps" else getattr(tai, scale)
        t.precision = 6
        iso[scale] = t.isot
    times.append({"iso": iso, "day": day, "seconds": float(seconds)})
offsets = [{"mjd": float(mjd), "offset": float(erfa.dat(*Time(mjd, format="mjd").ymdhms.tolist()[:3], mjd % 1.0))}
           for mjd in rng.uniform(36935, 61000, 200)]

sky = []
for mjd in rng.uniform(41400, 65000, 400):
    lon, lat, height = (float(v) for v in (rng.uniform(-180, 180), rng.uniform(-90, 90), rng.uniform(0, 5000)))
    ra, dec = float(rng.uniform(0, 360)), float(np.degrees(np.arcsin(rng.uniform(-1, 1))))
    aob, zob, *_ = erfa.atco13(np.radians(ra), np.radians(dec), 0, 0, 0, 0, 2400000.5, mjd, 0.0, np.radians(lon),
                               np.radians(lat), height, 0, 0, 0.0, 0.0, 0.0, 0.55)
    sky.append({"mjd": float(mjd), "lon": lon, "lat": lat, "height": height, "ra": ra, "dec": dec,
                "alt": float(90 - np.degrees(zob)), "az": float(np.degrees(aob))})
json.dump({"times": times, "offsets": offsets, "sky": sky}, sys.stdout, separators=(",", ":"))
