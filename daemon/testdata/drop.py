"""Writes the frames of one folder into two drop folders with tifffile, each shot in another way."""
import glob, os, sys
import tifffile

raw, streak, reference = sys.argv[1:]
ways = [dict(), dict(bigtiff=True), dict(byteorder=">", rowsperstrip=7)]
for arm, folder in (("S", streak), ("R", reference)):
    for i, path in enumerate(sorted(glob.glob(os.path.join(raw, arm + "_*.tif")))):
        way = dict(ways[i % len(ways)])
        opts = {k: way.pop(k) for k in ("bigtiff", "byteorder") if k in way}
        with tifffile.TiffWriter(os.path.join(folder, os.path.basename(path)), **opts) as w:
            w.write(tifffile.imread(path), photometric="minisblack", **way)
print("tifffile", tifffile.__version__)
