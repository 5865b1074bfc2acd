"""Reference values for the tests of the Earth's motion, by ERFA.

Run: /usr/bin/python3 earth.py > earth.json
"""
import json
import sys

import erfa
import numpy as np

DAY = 2400000.5
AU = 149597870700.0
rng = np.random.default_rng(20260803)

earth = []
for mjd in np.concatenate([np.linspace(15020, 88069, 200), rng.uniform(50000, 65000, 100)]):
    h, b = erfa.epv00(DAY, mjd)
    earth.append({"mjd": float(mjd), "p": [float(v) for v in h["p"]], "v": [float(v) for v in h["v"]]})

sites = []
for mjd in np.concatenate([rng.uniform(41400, 65000, 150), np.floor(rng.uniform(50000, 65000, 50))]):
    lon, lat, height = (float(v) for v in (rng.uniform(-180, 360), rng.uniform(-90, 90), rng.uniform(-400, 6000)))
    if len(sites) % 50 == 0:
        lat = 90.0 if len(sites) % 100 else -90.0
    # UT1 = UTC, no polar motion.
    tai = erfa.utctai(DAY, mjd)
    tt = erfa.taitt(*tai)
    gst = erfa.gst06a(DAY, mjd, *tt)
    pv = erfa.pvtob(np.radians(lon), np.radians(lat), height, 0.0, 0.0, 0.0, gst)
    p = erfa.pnm06a(*tt).T @ np.asarray(pv["p"])
    xyz = erfa.gd2gc(1, np.radians(lon), np.radians(lat), height)
    sites.append({"mjd": float(mjd), "lon": lon, "lat": lat, "height": height,
                  "p": [float(v / AU) for v in p], "fixed": [float(v) for v in xyz],
                  "gmst": float(np.degrees(erfa.gmst06(DAY, mjd, *tt))), "gast": float(np.degrees(gst))})
json.dump({"earth": earth, "sites": sites}, sys.stdout, separators=(",", ":"))
