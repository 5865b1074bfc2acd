"""Places of several systems and the ICRS ones by astropy, for the tests of package wcs.

Run: /usr/bin/python3 systems.py
"""
import json
import sys
import warnings

import numpy as np
from astropy.coordinates import FK4, FK5, FK4NoETerms, Galactic, SkyCoord
from astropy.time import Time

warnings.simplefilter("ignore")
rng = np.random.default_rng(20260805)
frames = [("FK5", 2000.0, FK5(equinox="J2000")), ("FK5", 1975.0, FK5(equinox="J1975")), ("FK5", 2030.0, FK5(equinox="J2030"))]
for equinox, year in ((1950.0, 1950.0), (1950.0, 1984.5), (1900.0, 1955.0), (1875.0, 1900.0)):
    when = Time(year, format="byear", scale="tt")
    frames.append(("FK4", equinox, FK4(equinox="B%.1f" % equinox, obstime=when)))
    frames.append(("FK4-NO-E", equinox, FK4NoETerms(equinox="B%.1f" % equinox, obstime=when)))
frames.append(("GALACTIC", None, Galactic()))
out = []
for name, equinox, frame in frames:
    lon, lat = rng.uniform(0, 360, 50), np.degrees(np.arcsin(rng.uniform(-1, 1, 50)))
    lat[:2] = 89.99, -89.99
    c = SkyCoord(lon, lat, unit="deg", frame=frame).icrs
    mjd = float(frame.obstime.mjd) if name.startswith("FK4") else None
    for a, b, ra, dec in zip(lon, lat, c.ra.deg, c.dec.deg):
        out.append({"system": name, "equinox": equinox, "mjd": mjd, "lon": float(a), "lat": float(b),
                    "ra": float(ra), "dec": float(dec)})
json.dump(out, sys.stdout)
