"""Print every object of the HDF5 files named on the command line as JSON,
one line per file, as h5py sees them."""
import base64
import json
import sys

import h5py
import numpy as np


def attrs(obj):
    out = {}
    for name, v in obj.attrs.items():
        if isinstance(v, str):
            out[name] = v
        elif isinstance(v, np.ndarray):
            out[name] = [x if isinstance(x, str) else x.item() for x in v]
        else:
            out[name] = v.item()
    assert len(out) == len(obj.attrs)
    return out


def node(obj):
    d = {"attrs": attrs(obj)}
    if isinstance(obj, h5py.Group):
        d["links"] = {k: node(obj[k]) for k in obj}
        assert len(d["links"]) == len(obj)
        return d
    d["shape"] = list(obj.shape)
    d["type"] = obj.dtype.str
    d["chunks"] = list(obj.chunks or [])
    d["filters"] = [obj.shuffle, obj.compression]
    v = obj[()]
    if isinstance(v, bytes):
        info = h5py.h5t.check_string_dtype(obj.dtype)
        d["text"] = v.decode("utf-8")
        d["cset"] = info.encoding
    else:
        d["data"] = base64.b64encode(np.ascontiguousarray(v).tobytes()).decode()
    return d


for path in sys.argv[1:]:
    with h5py.File(path, "r") as f:
        print(json.dumps(node(f)), flush=True)
