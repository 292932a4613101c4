"""Opens the cube of every result folder given and checks it against its metrics.json."""
import hashlib, json, os, sys
import h5py
import numpy as np

for folder in sys.argv[1:]:
    with open(os.path.join(folder, "metrics.json")) as f:
        m = json.load(f)
    with h5py.File(os.path.join(folder, "cube.nxs"), "r") as f:
        counts = f["entry/data/counts"][()]
        time = f["entry/data/time"][()]
    assert counts.ndim == 3 and len(time) == counts.shape[0], folder
    assert np.isfinite(counts).all() and (counts >= 0).all(), folder
    assert (np.diff(time) > 0).all(), folder
    total = m["quantities"]["total_light"]["value"]
    assert abs(counts.sum(dtype=np.float64) - total) <= 1e-5 * max(total, 1), (folder, counts.sum(), total)
    for name, info in m["files"].items():
        data = open(os.path.join(folder, name), "rb").read()
        assert len(data) == info["bytes"] and hashlib.sha256(data).hexdigest() == info["sha256"], (folder, name)
print(len(sys.argv) - 1, "whole")
