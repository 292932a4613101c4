"""Opens a result with h5py and silx and checks that the default plot is a valid NXdata."""
import json, os, sys
import h5py
import numpy as np
import silx
from silx.io import nxdata

folder = sys.argv[1]
with open(os.path.join(folder, "metrics.json")) as f:
    metrics = json.load(f)
with h5py.File(os.path.join(folder, "cube.nxs"), "r") as f:
    data = nxdata.get_default(f)
    assert data is not None and data.is_valid, "silx finds no valid default NXdata"
    assert data.axes_dataset_names == ["time", "y", "x"], data.axes_dataset_names
    counts, time = f["entry/data/counts"], f["entry/data/time"]
    assert counts.dtype == np.float32 and time.dtype == np.float64
    assert time.attrs["units"] in ("ps", b"ps"), time.attrs["units"]
    light = counts[()].sum(axis=(1, 2), dtype=np.float64)
    curve = metrics["curves"]["light"]
    edges = f["entry/data/time_edges"][()] if "time_edges" in f["entry/data"] else None
    assert np.allclose(curve["time"], time[()], rtol=0, atol=1e-9)
    if edges is not None:
        assert np.allclose(light / np.diff(edges), curve["value"], rtol=1e-5)
    prov = f["entry/provenance"]
    print("h5py", h5py.__version__, "silx", silx.version, counts.shape, sorted(prov.keys()))
