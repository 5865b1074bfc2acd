#!/usr/bin/python3
"""Cut the shared strips of neighbouring sky tiles, for the tests in internal/realsky.

    cut.py FOLDER-WITH-TILES

FOLDER holds tile_1420186.fits.gz and the five others, the K-band atlas images
named in README.md. Writes strip_*.fits.gz beside this script. Pixels are
rounded to 1/32 count (their noise is above 2 counts) so that they compress;
CRPIX moves with the cut, all other keywords stay. Needs astropy.
"""
import gzip
import io
import pathlib
import sys

import numpy as np
from astropy.io import fits

# Name of the strip, tile, first column and row (1-based). The tiles of a pair
# share columns 5-79 of the one and 433-507 of the other, 823 rows.
WIDTH, HEIGHT = 200, 900
STRIPS = [
    ("1420186-left", "1420186", 1, 125),
    ("1430092-right", "1430092", 313, 1),
    ("1420198-left", "1420198", 1, 125),
    ("1430080-right", "1430080", 313, 1),
    ("1430080-left", "1430080", 1, 1),
    ("1440198-right", "1440198", 313, 125),
    ("1430092-left", "1430092", 1, 1),
    ("1440186-right", "1440186", 313, 125),
]

source = pathlib.Path(sys.argv[1])
target = pathlib.Path(__file__).resolve().parent
for name, tile, x, y in STRIPS:
    with fits.open(source / f"tile_{tile}.fits.gz") as hdus:
        pixels, header = hdus[0].data, hdus[0].header
    cut = pixels[y - 1:y - 1 + HEIGHT, x - 1:x - 1 + WIDTH]
    header["CRPIX1"] -= x - 1
    header["CRPIX2"] -= y - 1
    header["HISTORY"] = f"cut to {WIDTH} x {HEIGHT} from column {x}, row {y}; pixels rounded to 1/32"
    buffer = io.BytesIO()
    fits.PrimaryHDU((np.round(cut * 32) / 32).astype(np.float32), header).writeto(buffer)
    # Time 0, so that the same cut gives the same file.
    (target / f"strip_{name}.fits.gz").write_bytes(gzip.compress(buffer.getvalue(), 9, mtime=0))
