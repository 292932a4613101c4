#!/usr/bin/python3
"""Read back files with general-purpose tools.

usage: back.py DIR

Reads DIR/*.tif with tifffile and libtiff's tiffinfo, DIR/*.npy with numpy, and
compares with the .want file beside each (raw little-endian values).
"""
import glob
import subprocess
import sys

import numpy as np
import tifffile

n = 0
for path in sorted(glob.glob(sys.argv[1] + "/*.tif")):
    a = tifffile.imread(path)
    assert a.dtype == "u2" and a.astype("<u2").tobytes() == open(path + ".want", "rb").read(), path
    with tifffile.TiffFile(path) as t:
        tags = t.pages[0].tags
        print(path.rsplit("/", 1)[-1], a.shape, tags[306].value if 306 in tags else None, tags[37520].value if 37520 in tags else None)
    p = subprocess.run(["tiffinfo", "-d", path], capture_output=True, text=True)
    assert p.returncode == 0 and "Error" not in p.stderr, p.stderr
    n += 1
for path in sorted(glob.glob(sys.argv[1] + "/*.npy")):
    a = np.load(path)
    assert a.dtype == "<f4" and a.tobytes() == open(path + ".want", "rb").read(), path
    print(path.rsplit("/", 1)[-1], a.shape)
    n += 1
print(n, "files")
