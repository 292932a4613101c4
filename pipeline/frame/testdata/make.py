#!/usr/bin/python3
"""Write frame files with general-purpose tools, and what they hold.

usage: make.py OUT HEIGHT WIDTH SEED [NAME ...]

Writes NAME and NAME.want for every case (or for those named): the want file
holds the pixels as little-endian float32, row-major. list.json tells the
sides and the largest code of every file, and the files to be refused.

Writers: tifffile, libtiff's tiffcp, astropy, numpy, Pillow. Packed bits and
the rarer PNG filters are laid out here after TIFF 6.0 and the PNG
specification; the PNG files are read back with Pillow and compared.
"""
import io
import json
import os
import struct
import subprocess
import sys
import warnings
import zlib

import numpy as np
import tifffile
from astropy.io import fits
from PIL import Image

out, h, w, seed = sys.argv[1], int(sys.argv[2]), int(sys.argv[3]), int(sys.argv[4])
only = set(sys.argv[5:])
rng = np.random.default_rng(seed)
cases, refused = [], []


def scene(dtype):
    """Values that use the whole range, smooth in one half, wild in the other."""
    dtype = np.dtype(dtype)
    if dtype.kind == "f":
        a = rng.normal(1000, 300, (h, w)) * 10.0 ** rng.integers(-3, 4, (h, w))
        a.flat[0] = 0
        a.flat[-1] = -1.5
        return a.astype(dtype)
    lo, hi = np.iinfo(dtype).min, np.iinfo(dtype).max
    a = rng.integers(lo, hi, (h, w), dtype=dtype, endpoint=True)
    a[: h // 2] = (np.arange(w) * 3 + 1).astype(dtype)
    a.flat[-1] = hi
    a.flat[0] = lo
    return a


def note(name, data, want, full):
    if only and name not in only:
        return
    with open(os.path.join(out, name), "wb") as f:
        f.write(data)
    with np.errstate(over="ignore"):
        want = np.ascontiguousarray(want).astype("<f4")
    with open(os.path.join(out, name + ".want"), "wb") as f:
        f.write(want.tobytes())
    cases.append({"file": name, "w": w, "h": h, "full": float(full)})


def refuse(name, data, word):
    if only and name not in only:
        return
    with open(os.path.join(out, name), "wb") as f:
        f.write(data)
    refused.append({"file": name, "word": word})


def full(dtype):
    return 0 if np.dtype(dtype).kind == "f" else np.iinfo(dtype).max


def tiff(a, **kw):
    b = io.BytesIO()
    tifffile.imwrite(b, a, metadata=None, **kw)
    return b.getvalue()


def tiffcp(data, *args):
    src, dst = os.path.join(out, "in.tmp"), os.path.join(out, "out.tmp")
    with open(src, "wb") as f:
        f.write(data)
    subprocess.run(["tiffcp", *args, src, dst], check=True)
    with open(dst, "rb") as f:
        data = f.read()
    os.remove(src)
    os.remove(dst)
    return data


kinds = ["u1", "u2", "u4", "i1", "i2", "i4", "f4", "f8"]
short = {"<": "le", ">": "be"}

# tifffile: kind, byte order, size of offsets, strips, tiles, Deflate, predictor 2
for k in kinds:
    a = scene(k)
    for o in "<>":
        for big in (False, True):
            n = f"tf-{k}-{short[o]}{'-big' if big else ''}"
            kw = dict(byteorder=o, bigtiff=big)
            note(n + ".tif", tiff(a, **kw), a, full(k))
            note(n + "-rows3.tif", tiff(a, rowsperstrip=3, **kw), a, full(k))
            note(n + "-tile.tif", tiff(a, tile=(16, 32), **kw), a, full(k))
            note(n + "-zip.tif", tiff(a, compression="zlib", rowsperstrip=4, **kw), a, full(k))
            note(n + "-zipold.tif", tiff(a, compression=32946, **kw), a, full(k))
            note(n + "-zip-tile.tif", tiff(a, compression="zlib", tile=(16, 16), **kw), a, full(k))
            if a.dtype.kind != "f":
                note(n + "-zip2.tif", tiff(a, compression="zlib", predictor=2, **kw), a, full(k))
                note(n + "-zip2-tile.tif", tiff(a, compression="zlib", predictor=2, tile=(32, 16), **kw), a, full(k))

# first page of several
a = scene("u2")
b = io.BytesIO()
with tifffile.TiffWriter(b) as tw:
    for page in (a, a + 1, a[::-1]):
        tw.write(page, photometric="minisblack", contiguous=False, metadata=None)
note("tf-u2-pages.tif", b.getvalue(), a, 65535)

# 0 is white
for k in ("u1", "u2", "u4"):
    a = scene(k)
    note(f"tf-{k}-white.tif", tiff(a, photometric="miniswhite"), np.iinfo(k).max - a, full(k))
    note(f"tf-{k}-white-zip2.tif", tiff(a, photometric="miniswhite", compression="zlib", predictor=2, byteorder=">"), np.iinfo(k).max - a, full(k))

# values that are not finite, and float64 beyond float32
a = scene("f4")
a.flat[:3] = np.nan, np.inf, -np.inf
note("tf-f4-nan.tif", tiff(a), a, 0)
a = scene("f8")
a.flat[:2] = 1e300, 1e-50
note("tf-f8-wide.tif", tiff(a), a, 0)

# libtiff: LZW, PackBits, Deflate, predictors 2 and 3, tiles, byte order, BigTIFF
codings = [("lzw", ["lzw"]), ("packbits", ["packbits"]), ("zip", ["zip"]), ("none", ["none"])]
for k in kinds:
    a = scene(k)
    data = tiff(a)
    some = codings + [("lzw2", ["lzw:2"]), ("zip2", ["zip:2"])]
    if a.dtype.kind == "f":
        some += [("lzw3", ["lzw:3"]), ("zip3", ["zip:3"])]
    for cname, c in some:
        for o, flag in (("le", "-L"), ("be", "-B")):
            if o == "be" and cname.endswith("3"):
                continue  # libtiff 4.5 on a little-endian machine reads back other values than it wrote
            n = f"cp-{k}-{o}-{cname}"
            note(n + ".tif", tiffcp(data, flag, "-c", *c), a, full(k))
            note(n + "-rows2.tif", tiffcp(data, flag, "-s", "-r", "2", "-c", *c), a, full(k))
            note(n + "-tile.tif", tiffcp(data, flag, "-t", "-w", "16", "-l", "32", "-c", *c), a, full(k))
            note(n + "-big.tif", tiffcp(data, flag, "-8", "-c", *c), a, full(k))
flat = np.full((h, w), 257, "u2")  # one run after the other
for cname, c in codings:
    note(f"cp-flat-{cname}.tif", tiffcp(tiff(flat), "-c", *c), flat, 65535)


# packed bits, high bit first, rows padded to a byte: TIFF 6.0, FillOrder 1
def packed(a, bits, order):
    rows = b""
    for row in a:
        s = "".join(format(int(v), f"0{bits}b") for v in row)
        s += "0" * (-len(s) % 8)
        rows += bytes(int(s[i:i + 8], 2) for i in range(0, len(s), 8))
    tags = [(256, 3, w), (257, 3, h), (258, 3, bits), (259, 3, 1), (262, 3, 1),
            (273, 4, 8), (277, 3, 1), (278, 3, h), (279, 4, len(rows))]
    pad = b"\0" * (len(rows) % 2)
    head = (b"II" if order == "<" else b"MM") + struct.pack(order + "HI", 42, 8 + len(rows) + len(pad))
    ifd = struct.pack(order + "H", len(tags))
    for tag, kind, v in tags:
        ifd += struct.pack(order + "HHI", tag, kind, 1)
        ifd += struct.pack(order + ("HH" if kind == 3 else "I"), *((v, 0) if kind == 3 else (v,)))
    return head + rows + pad + ifd + b"\0\0\0\0"


for bits in (10, 12, 14):
    a = rng.integers(0, 2**bits, (h, w))
    a.flat[0] = 2**bits - 1
    for o in "<>":
        data = packed(a, bits, o)
        note(f"pack-{bits}-{short[o]}.tif", data, a, 2**bits - 1)
        for cname, c in codings[:3]:
            note(f"pack-{bits}-{short[o]}-{cname}.tif", tiffcp(data, "-c", *c), a, 2**bits - 1)



# predictor 3, big-endian: Technical Note 3, checked by reading it with libtiff
def strip3(a):
    rows = b""
    for row in a:
        planes = np.frombuffer(row.astype(row.dtype.newbyteorder(">")).tobytes(), "u1").reshape(w, -1).T.ravel()
        rows += np.diff(planes, prepend=np.uint8(0)).astype("u1").tobytes()
    data = zlib.compress(rows)
    tags = [(256, w), (257, h), (258, 8 * a.dtype.itemsize), (259, 8), (262, 1), (273, 8),
            (277, 1), (278, h), (279, len(data)), (317, 3), (339, 3)]
    pad = b"\0" * (len(data) % 2)
    ifd = struct.pack(">H", len(tags)) + b"".join(struct.pack(">HHII", t, 4, 1, v) for t, v in tags)
    data = b"MM" + struct.pack(">HI", 42, 8 + len(data) + len(pad)) + data + pad + ifd + b"\0\0\0\0"
    back = tifffile.imread(io.BytesIO(tiffcp(data, "-c", "none")))
    assert back.tobytes() == a.tobytes(), "libtiff reads predictor 3 otherwise"
    return data


for k in ("f4", "f8"):
    a = scene(k)
    note(f"diff3-{k}-be.tif", strip3(a), a, 0)

refuse("rgb.tif", tiff(np.zeros((h, w, 3), "u1"), photometric="rgb"), "colour")
refuse("planes.tif", tiff(np.zeros((3, h, w), "u1"), photometric="rgb", planarconfig="separate"), "colour")
refuse("palette.tif", tiff(np.zeros((h, w), "u1"), photometric="palette", colormap=np.zeros((3, 256), "u2")), "palette")
refuse("alpha.tif", tiff(np.zeros((h, w, 2), "u1"), photometric="minisblack", planarconfig="contig", extrasamples=["unassalpha"]), "2 channels")
refuse("bilevel.tif", tiff(np.zeros((h, w), bool), photometric="minisblack"), "1 bits")
refuse("half.tif", tiff(np.zeros((h, w), "f2")), "16 bits")
refuse("complex.tif", tiff(np.zeros((h, w), "c8")), "sample format 6")
refuse("jpeg.tif", tiffcp(tiff(np.zeros((h, w), "u1")), "-c", "jpeg"), "JPEG")
refuse("zstd.tif", tiffcp(tiff(np.zeros((h, w), "u1")), "-c", "zstd"), "Zstandard")
refuse("backwards.tif", tiffcp(tiff(np.zeros((h, w), "u2")), "-f", "lsb2msb", "-c", "none"), "FillOrder")

# PNG by Pillow, and by hand with every filter and interlaced
for k in ("u1", "u2"):
    a = scene(k)
    b = io.BytesIO()
    Image.fromarray(a).save(b, "png")
    note(f"pil-{k}.png", b.getvalue(), a, full(k))


def chunk(name, data):
    return struct.pack(">I", len(data)) + name + data + struct.pack(">I", zlib.crc32(name + data))


def paeth(a, b, c):
    p = a + b - c
    pa, pb, pc = abs(p - a), abs(p - b), abs(p - c)
    return a if pa <= pb and pa <= pc else b if pb <= pc else c


def filtered(a):
    bpp = a.dtype.itemsize
    rows = [r.astype(a.dtype.newbyteorder(">")).tobytes() for r in a]
    got, prev = b"", bytes(len(rows[0]) if rows else 0)
    for y, row in enumerate(rows):
        f = y % 5
        left = bytes(bpp) + row
        corner = bytes(bpp) + prev
        pred = [lambda i: 0, lambda i: left[i], lambda i: prev[i],
                lambda i: (left[i] + prev[i]) // 2, lambda i: paeth(left[i], prev[i], corner[i])][f]
        got += bytes([f]) + bytes((row[i] - pred(i)) & 255 for i in range(len(row)))
        prev = row
    return got


def png(a, interlace, extra=b""):
    if interlace:
        passes = [(0, 0, 8, 8), (0, 4, 8, 8), (4, 0, 8, 4), (0, 2, 4, 4), (2, 0, 4, 2), (0, 1, 2, 2), (1, 0, 2, 1)]
        parts = [a[y0::dy, x0::dx] for y0, x0, dy, dx in passes]
        body = b"".join(filtered(p) for p in parts if p.size)
    else:
        body = filtered(a)
    z = zlib.compress(body)
    head = struct.pack(">IIBBBBB", w, h, 8 * a.dtype.itemsize, 0, 0, 0, interlace)
    half = len(z) // 2
    data = (b"\x89PNG\r\n\x1a\n" + chunk(b"IHDR", head) + extra + chunk(b"IDAT", z[:half]) + chunk(b"IDAT", z[half:])
            + chunk(b"IEND", b""))
    back = np.array(Image.open(io.BytesIO(data)))
    assert (back == a).all(), "Pillow reads the PNG otherwise"
    return data


for k in ("u1", "u2"):
    a = scene(k)
    for i in (0, 1):
        note(f"hand-{k}-{i}.png", png(a, i), a, full(k))
    note(f"hand-{k}-clear.png", png(a, 0, chunk(b"tRNS", struct.pack(">H", int(a.flat[0])))), a, full(k))
for mode, word in (("RGB", "colour"), ("P", "palette"), ("LA", "transparency"), ("1", "1 bits")):
    b = io.BytesIO()
    Image.new(mode, (w, h)).save(b, "png")
    refuse(f"pil-{mode}.png", b.getvalue(), word)


# FITS by astropy; scaled values after equation 3 of FITS 4.0, from the stored codes
def fits_bytes(*units):
    b = io.BytesIO()
    fits.HDUList(list(units)).writeto(b)
    return b.getvalue()


for k in ("u1", "i2", "i4", "i8", "f4", "f8"):
    a = scene(k)
    note(f"ap-{k}.fits", fits_bytes(fits.PrimaryHDU(a)), a, full(k))
    note(f"ap-{k}-cube.fits", fits_bytes(fits.PrimaryHDU(a[None])), a, full(k))
    table = fits.BinTableHDU.from_columns([fits.Column("t", "D", array=np.arange(500.0))])
    note(f"ap-{k}-ext.fits", fits_bytes(fits.PrimaryHDU(), table, fits.ImageHDU(a), fits.ImageHDU(a * 0)), a, full(k))
for k in ("u2", "u4", "i1"):  # BZERO
    a = scene(k)
    note(f"ap-{k}.fits", fits_bytes(fits.PrimaryHDU(a)), a, full(k))
a = rng.integers(-3000, 3000, (h, w)).astype("f8") * 0.5 + 10
unit = fits.PrimaryHDU(a)
unit.scale("int16", bscale=0.5, bzero=10)
data = fits_bytes(unit)
raw = fits.open(io.BytesIO(data), do_not_scale_image_data=True)[0].data
note("ap-scaled.fits", data, raw.astype("f8") * 0.5 + 10, 32767 * 0.5 + 10)
assert (fits.open(io.BytesIO(data))[0].data == raw.astype("f8") * 0.5 + 10).all()
a = scene("i2")
unit = fits.PrimaryHDU(a)
unit.header["BLANK"] = int(a.flat[-1])
data = fits_bytes(unit)
with warnings.catch_warnings():
    warnings.simplefilter("ignore")
    note("ap-blank.fits", data, fits.open(io.BytesIO(data))[0].data, 32767)
a = scene("f4")
a.flat[:2] = np.nan, np.inf
note("ap-nan.fits", fits_bytes(fits.PrimaryHDU(a)), a, 0)
refuse("ap-packed.fits", fits_bytes(fits.PrimaryHDU(), fits.CompImageHDU(scene("i2"))), "tile-compressed")
refuse("ap-planes.fits", fits_bytes(fits.PrimaryHDU(np.zeros((3, h, w), "i2"))), "more than one picture")
refuse("ap-line.fits", fits_bytes(fits.PrimaryHDU(np.zeros(w, "i2"))), "one axis")
refuse("ap-none.fits", fits_bytes(fits.PrimaryHDU()), "no image array")

# NPY by numpy
for k in ("u1", "u2", "u4", "u8", "i1", "i2", "i4", "i8", "f4", "f8"):
    a = scene(k)
    for o in "<>":
        for order in "CF":
            for version in ((1, 0), (2, 0), (3, 0)):
                b = io.BytesIO()
                with warnings.catch_warnings():
                    warnings.simplefilter("ignore")
                    np.lib.format.write_array(b, np.array(a.astype(o + k), order=order), version)
                note(f"np-{k}-{short[o]}-{order}{version[0]}.npy", b.getvalue(), a, full(k))
for name, a, word in (("bool", np.zeros((h, w), bool), "|b1"), ("complex", np.zeros((h, w), "c8"), "<c8"),
                      ("half", np.zeros((h, w), "f2"), "<f2"), ("line", np.zeros(w), "1 axes"),
                      ("cube", np.zeros((2, h, w)), "3 axes"), ("none", np.zeros((0, w)), "shape"),
                      ("record", np.zeros((h, w), [("x", "f4"), ("y", "f4")]), "values")):
    b = io.BytesIO()
    np.save(b, a)
    refuse(f"np-{name}.npy", b.getvalue(), word)

with open(os.path.join(out, "list.json"), "w") as f:
    json.dump({"cases": cases, "refused": refused}, f, indent=1)
