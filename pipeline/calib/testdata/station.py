"""Writes a calibration series of a made-up station: station.py FOLDER SEED.

An independent model for TestForeignStations, in NumPy and SciPy: a scene
constant over window pixels on a grid of quarter pixels, Gaussian blur by
gaussian_filter, sweep in quarter-pixel steps, a turned, scaled and sometimes
mirrored reference view, uneven flats, a dark pattern, hot pixels, photon and
read noise. Needs numpy, scipy and tifffile. truth.txt holds window, frames,
blurs, ratio, gains, span and bend of the sweep, and the homography.
"""
import sys, os, numpy as np, tifffile
from scipy.ndimage import gaussian_filter, map_coordinates
out, seed = sys.argv[1], int(sys.argv[2])
rng = np.random.default_rng(seed)
os.makedirs(out, exist_ok=True)
H, W, T = [(64, 64, 32), (48, 80, 24), (96, 72, 40)][seed % 3]
Y0, X0 = int(rng.integers(0, 12)), int(rng.integers(0, 12))
if seed % 4 == 3: Y0 = X0 = 0
SH, SW = Y0 + H + T - 1 + int(rng.integers(2, 10)), X0 + W + int(rng.integers(0, 10))
ss, sr = rng.uniform(0.5, 1.0), rng.uniform(0.5, 1.0)
turn, scale = np.deg2rad(rng.uniform(-8, 8)), rng.uniform(0.8, 1.25)
mir = -1 if seed % 2 else 1
RH, RW = int(H * scale * 1.3) + 8, int(W * scale * 1.3) + 8
a = rng.uniform(0.5, 1.3)
gs, gr = rng.uniform(0.5, 3), rng.uniform(0.5, 3)   # pe/ADU
rn = 4.0
up = 4
pitch = 1 + seed % 3
code = np.kron(rng.random((H // pitch + 1, W // pitch + 1)) < 0.5, np.ones((pitch, pitch)))[:H, :W].astype(float)
code = 0.03 + 0.92 * code
flat_s = 1 + 0.03 * rng.normal(size=(SH, SW)); flat_s *= 1 - 0.1 * np.hypot(*np.meshgrid(np.linspace(-1, 1, SH), np.linspace(-1, 1, SW), indexing="ij")) ** 2; flat_s /= flat_s.mean()
flat_r = 1 + 0.03 * rng.normal(size=(RH, RW)); flat_r /= flat_r.mean()
hot_s = rng.random((SH, SW)) < 0.001; hot_r = rng.random((RH, RW)) < 0.001
off_s, off_r = 100 + 3 * rng.normal(size=(SH, SW)), 120 + 3 * rng.normal(size=(RH, RW))
def shoot(light, flat, off, hot, gain):
    pe = rng.poisson(np.maximum(light, 0) * flat) + rng.normal(0, rn, light.shape)
    adu = pe / gain + off
    adu[hot] += 20000
    return np.clip(np.round(adu), 0, 65535).astype(np.uint16)
def save(name, im): tifffile.imwrite(f"{out}/{name}.tif", im)
def S(light): return shoot(light, flat_s, off_s, hot_s, gs)
def R(light): return shoot(light, flat_r, off_r, hot_r, gr)
def place(x, s):   # window light displaced by s px (quarter pixels), blurred
    big = np.zeros((SH * up, SW * up))
    f = np.kron(x, np.ones((up, up))) / up**2
    d = int(round(s * up))
    y, xx = Y0 * up + d, X0 * up
    h = min(f.shape[0], big.shape[0] - y)
    if h > 0: big[y:y + h, xx:xx + W * up] = f[:h]
    big = gaussian_filter(big, ss * up, mode="constant")
    return big.reshape(SH, up, SW, up).sum((1, 3))
to = lambda x, y: np.array([[1, 0, x], [0, 1, y], [0, 0, 1.0]])
lin = scale * np.array([[mir * np.cos(turn), -np.sin(turn), 0], [mir * np.sin(turn), np.cos(turn), 0], [0, 0, 1 / scale]])
Hm = to((RW - 1) / 2 + rng.uniform(-3, 3), (RH - 1) / 2 + rng.uniform(-3, 3)) @ lin @ to(-(W - 1) / 2, -(H - 1) / 2)
G = np.linalg.inv(Hm)
def view(x):   # reference arm: fine sampling of the pixel-constant scene, then blur, then bin
    n = 4
    v, u = np.mgrid[0:RH * n, 0:RW * n]
    u, v = (u + .5) / n - .5, (v + .5) / n - .5
    px, py = G[0, 0] * u + G[0, 1] * v + G[0, 2], G[1, 0] * u + G[1, 1] * v + G[1, 2]
    f = map_coordinates(x, [py, px], order=0, mode="constant") / scale**2 / n**2
    f = gaussian_filter(f, sr * n, mode="constant")
    return a * f.reshape(RH, n, RW, n).sum((1, 3))
lvl = 20000
for i in range(6):
    save(f"dark_s_{i}", S(np.zeros((SH, SW)))); save(f"dark_r_{i}", R(np.zeros((RH, RW))))
for k, l in enumerate([1500, 5000, 12000, 25000]):
    for c in "ab":
        save(f"flat_s_{k}{c}", S(np.full((SH, SW), l * 1.0))); save(f"flat_r_{k}{c}", R(np.full((RH, RW), l * 1.0)))
one = np.ones((H, W)) * lvl
for i in range(4):
    save(f"code_{i}", S(place(one * code, 0))); save(f"open_{i}", S(place(one, 0))); save(f"even_r_{i}", R(view(one)))
t = gaussian_filter(rng.random((H, W)), 1.0); t = (t - t.min()) / (t.max() - t.min())
b = np.kron(rng.random((H // 8 + 1, W // 8 + 1)), np.ones((8, 8)))[:H, :W]
tg = lvl * (0.1 + 0.6 * t + 0.3 * b)
for i in range(2):
    save(f"target_s_{i}", S(place(tg, 0))); save(f"target_r_{i}", R(view(tg)))
span = 25.0
q = rng.uniform(-0.15, 0.15)
s = lambda t: (T - 1) * ((t / span) * (1 - q) + q * (t / span) ** 2)
lines = []
n = [6, 9, 17][seed % 3]
from scipy.optimize import brentq
for i in range(n):
    d = round((T - 1) * i / (n - 1) * up) / up       # quarter pixel steps
    ps = brentq(lambda t: s(t) - d, -1, span + 1)
    x = np.zeros((H, W))
    for yy, xx in [(H // 5, W // 5), (H // 2, W // 2), (2 * H // 3, 4 * W // 5)]: x[yy, xx] = 30000
    if seed % 2: x *= code
    save(f"spot_{i:02d}", S(place(x, d)))
    lines.append(f'{{ ps = {ps:.6f}, frames = ["spot_{i:02d}.tif"] }}')
def flats(tag, m): return ", ".join(f'["flat_{tag}_{k}a.tif", "flat_{tag}_{k}b.tif"]' for k in range(m))
open(f"{out}/series.toml", "w").write(f'''station = "py"
[streak]
dark = ["dark_s_*.tif"]
flat = [{flats("s", 4)}]
[reference]
dark = ["dark_r_*.tif"]
flat = [{flats("r", 1 if seed % 3 == 0 else 3)}]
[code]
coded = ["code_*.tif"]
open = ["open_*.tif"]
reference = ["even_r_*.tif"]
[target]
streak = ["target_s_*.tif"]
reference = ["target_r_*.tif"]
[sweep]
direction = "down"
delays = [{", ".join(lines)}]
''')
np.save(f"{out}/code.npy", code.astype("f4"))
open(f"{out}/truth.txt", "w").write(" ".join(str(float(v)) for v in [X0, Y0, W, H, T, ss, sr, a, gs, gr, span, q, *Hm.ravel()]))
