#!/usr/bin/python3
"""Write files that store a time, with tifffile, Pillow and astropy.

usage: tags.py OUT

list.json tells what each stores: the time as it reads (without a zone it is
local), and the field, or "" if there is none.
"""
import datetime
import io
import json
import os
import struct
import sys
import zlib

import numpy as np
import tifffile
from astropy.io import fits
from astropy.time import Time
from PIL import Image, PngImagePlugin

out, cases = sys.argv[1], []
pixels = np.arange(12, dtype="u2").reshape(3, 4)
at = datetime.datetime(2031, 5, 6, 7, 8, 9)


def note(name, data, time, field):
    with open(os.path.join(out, name), "wb") as f:
        f.write(data)
    cases.append({"file": name, "time": time, "field": field})


def tiff(**kw):
    b = io.BytesIO()
    tifffile.imwrite(b, pixels, metadata=None, **kw)
    return b.getvalue()


for o in "<>":
    for big in (False, True):
        kw = dict(byteorder=o, bigtiff=big)
        n = ("le" if o == "<" else "be") + ("-big" if big else "")
        note(f"plain-{n}.tif", tiff(datetime=at, **kw), "2031-05-06T07:08:09", "TIFF DateTime")
        for digits in ("5", "123", "123456", "123456789"):
            tag = (37520, 2, 0, digits, True)
            note(f"sub{digits}-{n}.tif", tiff(datetime=at, extratags=[tag], **kw), "2031-05-06T07:08:09." + digits, "TIFF DateTime")
        original = [(36867, 2, 0, "2031:05:06 07:08:08", True), (37521, 2, 0, "75 ", True)]
        note(f"original-{n}.tif", tiff(datetime=at, extratags=original, **kw), "2031-05-06T07:08:08.75", "EXIF DateTimeOriginal")
        zone = original + [(36881, 2, 0, "+05:30", True)]
        note(f"zone-{n}.tif", tiff(datetime=at, extratags=zone, **kw), "2031-05-06T07:08:08.75+05:30", "EXIF DateTimeOriginal")
        blank = [(36867, 2, 0, "    :  :     :  :  ", True)]
        note(f"blank-{n}.tif", tiff(datetime=at, extratags=blank, **kw), "2031-05-06T07:08:09", "TIFF DateTime")
        note(f"none-{n}.tif", tiff(**kw), "", "")
        note(f"bad-{n}.tif", tiff(extratags=[(306, 2, 0, "yesterday", True)], **kw), "", "")
        note(f"badsub-{n}.tif", tiff(datetime=at, extratags=[(37520, 2, 0, "x", True)], **kw), "", "")

# an EXIF directory of its own: appended to a TIFF file, and by Pillow in PNG
fields = {36867: "2031:05:06 07:08:08", 37521: "987654", 37520: "1"}


def appended(order):
    start = len(tiff(datetime=at, byteorder=order, extratags=[(34665, 4, 1, 8, True)]))
    start += start % 2
    data = tiff(datetime=at, byteorder=order, extratags=[(34665, 4, 1, start, True)])
    data += bytes(start - len(data))
    texts, end = b"", start + 2 + 12 * len(fields) + 4
    ifd = struct.pack(order + "H", len(fields))
    for tag, value in sorted(fields.items()):
        v = value.encode() + b"\0"
        if len(v) <= 4:
            ifd += struct.pack(order + "HHI", tag, 2, len(v)) + v.ljust(4, b"\0")
        else:
            ifd += struct.pack(order + "HHII", tag, 2, len(v), end + len(texts))
            texts += v + bytes(len(v) % 2)
    return data + ifd + bytes(4) + texts


for o in "<>":
    data = appended(o)
    got = Image.open(io.BytesIO(data)).getexif().get_ifd(34665)
    assert dict(got) == fields, got
    note("exif-" + ("le" if o == "<" else "be") + ".tif", data, "2031-05-06T07:08:08.987654", "EXIF DateTimeOriginal")
exif = Image.Exif()
exif[306] = "2031:05:06 07:08:09"
exif[34665] = fields
b = io.BytesIO()
Image.fromarray(pixels).save(b, "png", exif=exif)
assert dict(Image.open(io.BytesIO(b.getvalue())).getexif().get_ifd(34665)) == fields
note("exif.png", b.getvalue(), "2031-05-06T07:08:08.987654", "EXIF DateTimeOriginal")

for i, (text, want) in enumerate([
        ("Tue, 06 May 2031 07:08:09 GMT", "2031-05-06T07:08:09Z"), ("Tue, 6 May 2031 07:08:09 +0200", "2031-05-06T07:08:09+02:00"),
        ("2031-05-06T07:08:09.25+02:00", "2031-05-06T07:08:09.25+02:00"), ("2031:05:06 07:08:09", "2031-05-06T07:08:09"),
        ("Tue, 06 May 2031 07:08:09 EST", ""), ("once", "")]):
    info = PngImagePlugin.PngInfo()
    info.add_text("Creation Time", text)
    b = io.BytesIO()
    Image.fromarray(pixels).save(b, "png", pnginfo=info)
    note(f"text{i}.png", b.getvalue(), want, "PNG Creation Time" if want else "")
b = io.BytesIO()
Image.fromarray(pixels).save(b, "png")
data = b.getvalue()
note("none.png", data, "", "")
body = b"tIME" + struct.pack(">HBBBBB", 2031, 5, 6, 7, 8, 9)
time = struct.pack(">I", 7) + body + struct.pack(">I", zlib.crc32(body))
note("time.png", data[:-12] + time + data[-12:], "2031-05-06T07:08:09Z", "PNG tIME")


def unit(**cards):
    u = fits.PrimaryHDU(pixels)
    for key, value in cards.items():
        u.header[key.replace("_", "-")] = value
    b = io.BytesIO()
    u.writeto(b)
    return b.getvalue()


isot = Time(at, scale="utc", precision=9)
note("obs.fits", unit(DATE_OBS=isot.isot), isot.isot + "Z", "FITS DATE-OBS")
note("utc.fits", unit(DATE_OBS="2031-05-06T07:08:09.5", TIMESYS="UTC"), "2031-05-06T07:08:09.5Z", "FITS DATE-OBS")
note("two.fits", unit(DATE_OBS="2031-05-06", TIME_OBS="07:08:09.25"), "2031-05-06T07:08:09.25Z", "FITS DATE-OBS")
note("tai.fits", unit(DATE_OBS="2031-05-06T07:08:09", TIMESYS="TAI"), "", "")
note("day.fits", unit(DATE_OBS="2031-05-06"), "", "")
note("old.fits", unit(DATE_OBS="06/05/31"), "", "")
note("none.fits", unit(), "", "")
first = fits.PrimaryHDU()
first.header["DATE-OBS"] = "2031-05-06T07:08:09.125"
b = io.BytesIO()
fits.HDUList([first, fits.ImageHDU(pixels)]).writeto(b)
note("ext.fits", b.getvalue(), "2031-05-06T07:08:09.125Z", "FITS DATE-OBS")
b = io.BytesIO()
np.save(b, pixels)
note("none.npy", b.getvalue(), "", "")

with open(os.path.join(out, "list.json"), "w") as f:
    json.dump(cases, f)
