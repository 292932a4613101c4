#!/usr/bin/python3
"""Published reconstructions of a coded, sheared streak frame, and the score.

Written from the equations of the papers, with NumPy, SciPy and scikit-image
(Debian: python3-numpy python3-scipy python3-skimage), to be compared with:

[1] J. M. Bioucas-Dias, M. A. T. Figueiredo, "A new TwIST: two-step iterative
    shrinkage/thresholding algorithms for image restoration", IEEE Trans.
    Image Process. 16(12), 2992-3004 (2007).
[2] X. Yuan, "Generalized alternating projection based total variation
    minimization for compressive sensing", IEEE ICIP 2016, 2539-2543.
[3] X. Liao, H. Li, L. Carin, "Generalized alternating projection for
    weighted-l2,1 minimization with applications to model-based compressive
    sensing", SIAM J. Imaging Sci. 7(2), 797-823 (2014).
[4] A. Chambolle, "An algorithm for total variation minimization and
    applications", J. Math. Imaging Vis. 20, 89-97 (2004), as implemented in
    skimage.restoration.denoise_tv_chambolle.
[5] A. Beck, M. Teboulle, "Fast gradient-based algorithms for constrained total
    variation image denoising and deblurring problems", IEEE Trans. Image
    Process. 18(11), 2419-2434 (2009).

usage: peers.py JOB.json     prints one JSON line per shot

The job names .npy files. Everything the peers are told is true: the code, the
window, the flat, dark, gain and dead pixels, the ratio and the registration.
What is unknown to a laboratory but told nevertheless (an advantage that ours
does not have): every setting of a peer is the one with the highest true PSNR,
and so is the iteration at which it stops.
"""
import json
import os
import sys
import time
from itertools import product

for v in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS"):
    os.environ.setdefault(v, "1")

import numpy as np
from multiprocessing import Pool
from multiprocessing.pool import ThreadPool
from numpy.lib.stride_tricks import as_strided
from scipy.ndimage import gaussian_filter, generic_filter, map_coordinates
from skimage.metrics import structural_similarity
from skimage.restoration import denoise_tv_chambolle


# --- score -------------------------------------------------------------------

def psnr(x, truth):
    """Peak signal to noise ratio, dB, over the whole cube; peak of the truth."""
    return float(10 * np.log10(float(truth.max()) ** 2 / np.mean((x.astype(float) - truth) ** 2)))


def ssim(x, truth):
    """Mean structural similarity of the cube, windows of 7 x 7 x 7."""
    return float(structural_similarity(truth.astype(float), x.astype(float), data_range=float(truth.max())))


# --- the measurement ---------------------------------------------------------

class Streak:
    """E[m, i] = sum over k of C[m-k, i] x[k, m-k, i]; bad pixels read 0.

    Frames land exactly one pixel apart, so E E^T is diagonal: sum over k of
    C^2 along the shear.
    """

    def __init__(self, code, frames, good):
        self.c, self.t, self.good = code, frames, good
        self.h, self.w = code.shape
        self.shape = frames, self.h, self.w
        self.size = good.shape
        self.gram = self.sums(np.broadcast_to(code * code, self.shape)) * good

    def sums(self, x):
        e = np.zeros(self.size, np.float32)
        for k in range(self.t):
            e[k:k + self.h] += x[k]
        return e

    def forward(self, x):
        return self.sums(self.c * x) * self.good

    def adjoint(self, e):
        e = np.ascontiguousarray(e * self.good)
        row, col = e.strides
        return self.c * as_strided(e, self.shape, (row, row, col))

    def projector(self, ridge):
        """(E E^T + ridge)^-1 as a function; ridge in units of E E^T's mean."""
        g = self.gram + ridge * self.gram.mean()
        inv = np.where(self.gram > 1e-3 * self.gram.mean(), 1 / np.maximum(g, 1e-12), 0).astype(np.float32)
        return lambda e: e * inv

    def data(self, streak, reference):
        return streak * self.good


class Joint(Streak):
    """The streak frame and, times weight, R[y, i] = sum over k of x[k, y, i].

    A measurement is both planes on top of each other. A A^T falls apart into
    one symmetric matrix per column.
    """

    def __init__(self, code, frames, good, weight):
        super().__init__(code, frames, good)
        self.weight, self.rows = np.float32(weight), good.shape[0]

    def forward(self, x):
        return np.concatenate([super().forward(x), self.weight * x.sum(0)])

    def adjoint(self, m):
        return super().adjoint(m[:self.rows]) + self.weight * m[self.rows:]

    def projector(self, ridge):
        n = self.rows + self.h
        a = np.zeros((self.w, n, n))
        m = np.arange(self.rows)
        a[:, m, m] = self.gram.T
        y = np.arange(self.h)
        for k in range(self.t):
            v = self.weight * (self.c * self.good[k:k + self.h]).T
            a[:, y + k, self.rows + y] = v
            a[:, self.rows + y, y + k] = v
        a[:, self.rows + y, self.rows + y] = self.weight ** 2 * self.t
        a[:, np.arange(n), np.arange(n)] += max(ridge, 1e-6) * self.gram.mean()
        inv = np.linalg.inv(a).astype(np.float32)
        return lambda e: np.einsum("inm,mi->ni", inv, e, optimize=True)

    def data(self, streak, reference):
        return np.concatenate([streak * self.good, self.weight * reference])


def norm(op, iterations=60):
    """The largest eigenvalue of A^T A, by power iteration."""
    x = np.random.default_rng(1).random(op.shape).astype(np.float32)
    for _ in range(iterations):
        x /= np.sqrt((x * x).sum())
        y = op.adjoint(op.forward(x))
        top = float((x * y).sum())
        x = y
    return top * 1.01


# --- total variation ---------------------------------------------------------

class Denoiser:
    """min over u of |u - f|^2/2 + weight TV(u), by fast gradient projection [5].

    axes (1, 2) denoises every frame alone, (0, 1, 2) the cube. It goes where
    denoise_tv_chambolle [4] goes (see check), in fewer steps and for all frames
    at once, and it keeps the dual from call to call: the next call starts where
    this one ended. With the slower iteration of [4] TwIST's two-step is hardly
    ever accepted and ends some dB lower.
    """

    def __init__(self, shape, axes, iterations):
        self.axes, self.iterations = axes, iterations
        self.p = np.zeros((len(axes),) + shape, np.float32)
        self.g = np.zeros_like(self.p)
        self.cut = [(cut(a, None, -1), cut(a, 1, None)) for a in axes]

    def minus_div(self, p):
        d = -p.sum(0)
        for q, (head, tail) in zip(p, self.cut):
            d[tail] += q[head]
        return d

    def gradient(self, u):
        for g, (head, tail) in zip(self.g, self.cut):
            np.subtract(u[tail], u[head], out=g[head])
        return self.g

    def tv(self, u):
        g = self.gradient(u)
        return float(np.sqrt(np.einsum("a...,a...->...", g, g)).sum(dtype=float))

    def __call__(self, f, weight):
        tau, w = np.float32(1 / (4 * len(self.axes))), np.float32(weight)
        q, t = self.p, 1.0
        for _ in range(self.iterations):
            old = self.p
            self.p = q - tau * self.gradient(f + self.minus_div(q))
            self.p /= np.maximum(np.sqrt(np.einsum("a...,a...->...", self.p, self.p)) / w, 1)
            t, last = (1 + np.sqrt(1 + 4 * t * t)) / 2, t
            q = self.p + np.float32((last - 1) / t) * (self.p - old)
        return f + self.minus_div(self.p)


class Frames:
    """Denoises every frame alone, the frames dealt out to some threads."""

    def __init__(self, shape, iterations, threads):
        edges = np.linspace(0, shape[0], threads + 1).astype(int)
        self.parts = [slice(a, b) for a, b in zip(edges, edges[1:])]
        self.den = [Denoiser((p.stop - p.start,) + shape[1:], (1, 2), iterations) for p in self.parts]
        self.each = ThreadPool(threads).map if threads > 1 else lambda f, a: list(map(f, a))

    def tv(self, u):
        return sum(self.each(lambda a: a[0].tv(u[a[1]]), zip(self.den, self.parts)))

    def __call__(self, f, weight):
        out = np.empty_like(f)

        def one(a):
            out[a[1]] = a[0](f[a[1]], weight)

        self.each(one, list(zip(self.den, self.parts)))
        return out


def cut(axis, a, b):
    return (slice(None),) * axis + (slice(a, b),)


def check():
    """The denoiser above finds the minimum that scikit-image's finds."""
    f = np.random.default_rng(2).random((4, 9, 11)).astype(np.float32)
    for axes, channel in ((0, 1, 2), None), ((1, 2), 0):
        want = denoise_tv_chambolle(f.astype(float), weight=0.3, eps=0, max_num_iter=5000, channel_axis=channel)
        off = abs(Denoiser(f.shape, axes, 500)(f, 0.3) - want).max()
        if off > 2e-3:  # [4] ends slowly; the values are 0 to 1
            raise SystemExit("peers.py: the denoiser differs from skimage's by %g" % off)


# --- the peers ---------------------------------------------------------------

class Watch:
    """Follows the true PSNR and says when it has stopped rising."""

    def __init__(self, truth, limit):
        self.truth, self.limit = truth, limit
        self.best, self.x, self.at, self.seconds = -np.inf, None, 0, 0.0
        self.mark, self.mark_at = -np.inf, 0
        self.path, self.begin, self.spent = [], time.perf_counter(), 0.0

    def stop(self, i, x):
        now = time.perf_counter()
        took = now - self.begin - self.spent
        p = psnr(x, self.truth)
        self.path.append((took, p))
        if p > self.best:
            self.best, self.x, self.at, self.seconds = p, x.copy(), i, took
        if p > self.mark + 0.02:
            self.mark, self.mark_at = p, i
        self.spent += time.perf_counter() - now
        return i >= self.limit or i - self.mark_at >= 40


def twist(op, y, top, den, weight, watch, low):
    """Monotone TwIST [1] for |y - Ax|^2/2 + weight TV(x), x >= 0.

    A is scaled so that the eigenvalues of A^T A lie in [low, 1]; alpha and beta
    are the paper's choice for these bounds.
    """
    s = np.float32(1 / np.sqrt(top))
    rho = (1 - np.sqrt(low)) / (1 + np.sqrt(low))
    alpha, beta = np.float32(rho ** 2 + 1), np.float32(2 * (rho ** 2 + 1) / (low + 1))
    y = y * s
    res = lambda x: y - s * op.forward(x)
    cost = lambda x, r: 0.5 * float((r.astype(float) ** 2).sum()) + weight * den.tv(x)
    gamma = lambda x, r: np.maximum(den(x + s * op.adjoint(r), weight), 0)
    old = np.maximum(s * op.adjoint(y), 0)
    r = res(old)
    x = gamma(old, r)
    r = res(x)
    f, i = cost(x, r), 1
    while not watch.stop(i, x):
        i += 1
        shrunk = gamma(x, r)
        new = np.maximum((1 - alpha) * old + (alpha - beta) * x + beta * shrunk, 0)
        rn = res(new)
        fn = cost(new, rn)
        if fn > f:  # monotone: a step of IST instead
            new = shrunk
            rn = res(new)
            fn = cost(new, rn)
        old, x, r, f = x, new, rn, fn
    return watch


def gap(op, y, solve, den, weight, watch, fast):
    """GAP-TV [2]: project on y = Ax, denoise, in turn; x >= 0. fast is the
    accelerated form [2, 3], in which the goal takes up what is left over.

    solve is (A A^T + ridge)^-1: with a ridge of 0 the projection of the paper;
    more of it allows the measurement its noise."""
    theta = np.maximum(op.adjoint(solve(y)), 0)
    goal, i = y, 0
    while True:
        i += 1
        seen = op.forward(theta)
        if fast and i > 1:
            goal = goal + (y - seen)
        theta = np.maximum(den(theta + op.adjoint(solve(goal - seen)), weight), 0)
        if watch.stop(i, theta):
            return watch


def back(op, y, truth):
    """Back projection, at the scale that fits the truth best."""
    x = op.adjoint(y)
    return x * (float((x * truth).sum()) / float((x * x).sum()))


# --- one shot ----------------------------------------------------------------

def reference_on_window(ref, good, homography, h, w, ratio):
    """The reference frame, photoelectrons, at the window's pixels, in light of
    the streak arm: cubic interpolation at the registered places, times the
    area that a window pixel has there. Bad pixels become their neighbours'
    median."""
    ref = np.where(good, ref, np.nan)
    ref = np.where(good, ref, generic_filter(ref, np.nanmedian, 3))
    y, x = np.mgrid[0:h, 0:w].astype(float)
    a = np.asarray(homography, float).reshape(3, 3)
    u, v, d = np.einsum("ij,jyx->iyx", a, np.stack([x, y, np.ones_like(x)]))
    u, v = u / d, v / d
    ux, uy = (a[0, 0] - u * a[2, 0]) / d, (a[0, 1] - u * a[2, 1]) / d
    vx, vy = (a[1, 0] - v * a[2, 0]) / d, (a[1, 1] - v * a[2, 1]) / d
    out = map_coordinates(ref, [v, u], order=3, mode="nearest")
    return (out * abs(ux * vy - uy * vx) / ratio).astype(np.float32)


class Shot:
    """The frames of a shot and what the peers are told."""

    def __init__(self, folder, shot, threads):
        self.threads = threads
        load = lambda name: np.load(os.path.join(folder, name))
        self.truth = load(shot["truth"])
        code = load(shot["code"])
        self.codes = {"sharp": code, "blurred": gaussian_filter(code, shot["blur"], mode="constant")}
        self.streak, self.good = load(shot["streak"]), load(shot["streak_good"]) > 0
        t, h, w = self.truth.shape
        self.reference = reference_on_window(load(shot["reference"]), load(shot["reference_good"]) > 0,
                                             shot["homography"], h, w, shot["ratio"])
        self.peak = np.float32(self.truth.max())
        self.ops = {}

    def op(self, code, arms):
        """The operator, its data at a peak of 1, and its norm; made once."""
        if (code, arms) not in self.ops:
            c, t, good = self.codes[code], len(self.truth), self.good.astype(np.float32)
            op = Streak(c, t, good) if arms == 0 else Joint(c, t, good, arms)
            self.ops[code, arms] = op, (op.data(self.streak, self.reference) / self.peak).astype(np.float32), norm(op), {}
        return self.ops[code, arms]

    def run(self, s, weight, limit, inner):
        """One run of a peer with setting s; returns what was watched."""
        op, y, top, solvers = self.op(s["code"], s["arms"])
        if s["tv"] == 2:
            den = Frames(op.shape, inner, self.threads)
        else:
            den = Denoiser(op.shape, (0, 1, 2), inner)
        truth = self.truth / self.peak
        if s["peer"] == "TwIST-TV":
            return twist(op, y, top, den, weight, Watch(truth, limit), s["low"])
        if s["ridge"] not in solvers:
            solvers[s["ridge"]] = op.projector(s["ridge"])
        return gap(op, y, solvers[s["ridge"]], den, weight, Watch(truth, limit), s["fast"])

    def search(self, s, limit, inner, start, factors):
        """The weight with the highest true PSNR: uphill in log weight."""
        done = {}

        def at(w):
            if w not in done:
                done[w] = self.run(s, w, limit, inner)
            return done[w].best

        best = start
        at(best)
        for f in factors:
            centre = best
            for g in (f, 1 / f):
                w = best * g
                while 1e-5 < w < 10 and at(w) > at(best):
                    best, w = w, w * g
                if best != centre:
                    break
        return best, done[best], len(done)


# --- the best a peer can do --------------------------------------------------

# What a peer is free to choose beside its weight. code: the true code, or the
# true code as the blurred streak sensor shows it with the sweep off. tv: 2, every
# frame alone; 3, the cube. low: the lower eigenvalue bound. ridge: noise allowed
# for in the projection. fast: the accelerated form. arms: 0 the streak arm
# alone, else the weight of the reference arm.
CHOICES = {
    "TwIST-TV": {"code": ("sharp", "blurred"), "tv": (2, 3), "low": (0.1, 0.01)},
    "GAP-TV": {"code": ("sharp", "blurred"), "tv": (2, 3), "fast": (True, False), "ridge": (0, 0.03, 0.1, 0.3, 1, 3, 10)},
}
ARMS = (0.25, 0.5, 1, 2)
FIRST = {
    "TwIST-TV": {"peer": "TwIST-TV", "code": "blurred", "tv": 2, "low": 0.1, "arms": 0},
    "GAP-TV": {"peer": "GAP-TV", "code": "blurred", "tv": 2, "fast": True, "ridge": 0.1, "arms": 0},
}

# Where looking begins: all of these, since GAP-TV has several hills in weight
# and ridge, and a climb from one place ends 7 dB too low on some shots.
WEIGHTS = {"TwIST-TV": (0.001, 0.004, 0.015, 0.06), "GAP-TV": (0.015, 0.06, 0.25, 1, 4)}
GRID = {
    "TwIST-TV": ({"tv": (2, 3)}, {"tv": (2, 3), "arms": (0.5, 1)}),
    "GAP-TV": ({"tv": (2, 3), "ridge": (0, 0.3)}, {"tv": (2, 3), "ridge": (0, 0.1, 1), "arms": (0.5,)}),
}


def grid(first, choices):
    """All combinations of choices, put into a first setting."""
    return [dict(first, **dict(zip(choices, v))) for v in product(*choices.values())]


class Best:
    """The best setting found for one peer on one shot."""

    def __init__(self, shot, settings, weights, effort):
        self.shot, self.effort, self.runs = shot, effort, 0
        best = -np.inf
        for s in settings:
            for w in weights:
                watch = shot.run(s, w, effort["look"], effort["inner"])
                self.runs += 1
                if watch.best > best:
                    best, self.s, self.weight, self.watch = watch.best, s, w, watch
        self.weight, self.watch = self.look(self.s, self.weight, (2,))

    def look(self, s, weight, factors=(3,), limit=None):
        w, watch, n = self.shot.search(s, limit or self.effort["look"], self.effort["inner"], weight, factors)
        self.runs += n
        return w, watch

    def choose(self, choices):
        """Tries the other values of one choice after the other, from the best
        so far; ordered values only as far as they help."""
        for key, values in choices.items():
            at = values.index(self.s[key])
            for path in values[at + 1:], values[:at][::-1]:
                for v in path:
                    s = dict(self.s, **{key: v})
                    w, watch = self.look(s, self.weight)
                    if watch.best <= self.watch.best:
                        break
                    self.s, self.weight, self.watch = s, w, watch

    def refine(self):
        """The last steps in the weight, and iterations to the end."""
        self.weight, self.watch = self.look(self.s, self.weight, self.effort["factors"], self.effort["last"])
        if self.effort["end"] > self.effort["last"] <= self.watch.at + 5:  # still rising
            self.weight, self.watch = self.look(self.s, self.weight, (), self.effort["end"])
        return self

    def report(self):
        x, truth = self.watch.x * self.shot.peak, self.shot.truth
        return {"psnr": psnr(x, truth), "ssim": ssim(x, truth), "seconds": self.watch.seconds,
                "near": next(t for t, p in self.watch.path if p >= self.watch.best - 0.1), "iterations": self.watch.at, "runs": self.runs, "setting": dict(self.s, weight=self.weight)}


# Iterations while looking, in the last runs, and in the very last if that still
# rises; the last runs' steps in weight; and denoising iterations in each: two
# are as good as five in fewer seconds.
EFFORT = {
    "full": {"look": 100, "last": 800, "end": 4000, "factors": (2,), "inner": 2},
    "short": {"look": 60, "last": 120, "end": 120, "factors": (), "inner": 2},
    "time": {"look": 100, "last": 4000, "end": 4000, "factors": (), "inner": 2},
}


def contest(args):
    """All peers, and ours, on one shot."""
    folder, name, d = args
    ours, truth = (np.load(os.path.join(folder, d[f])) for f in ("ours", "ours_truth"))
    out = {"id": d["id"], "scene": d["scene"], "light": d["light"],
           "ours": {"psnr": psnr(ours, truth), "ssim": ssim(ours, truth)}, "back": {}, "peers": {}}
    if name == "score":
        return out
    shot, effort = Shot(folder, d, 2 if name == "time" else 1), EFFORT[name]
    for arms in 0, 1:
        op, y, _, _ = shot.op("sharp", arms)
        out["back"]["both" if arms else "alone"] = psnr(back(op, y, shot.truth / shot.peak), shot.truth / shot.peak)
    for peer, first in FIRST.items():
        if name == "time" and peer != "TwIST-TV":
            continue
        if name == "full":
            settings = [grid(first, g) for g in GRID[peer]]
            alone, both = (Best(shot, g, WEIGHTS[peer], effort) for g in settings)
            alone.choose(CHOICES[peer])
            both.choose({"arms": ARMS, **CHOICES[peer]})
        else:
            alone, both = (Best(shot, [dict(first, arms=a)], WEIGHTS[peer], effort) for a in (0, 0.5))
        out["peers"][peer] = {"alone": alone.refine().report(), "both": both.refine().report()}
    return out


def main():
    check()
    with open(sys.argv[1]) as f:
        job = json.load(f)
    folder = os.path.dirname(os.path.abspath(sys.argv[1]))
    work = [(folder, job["effort"], s) for s in job["shots"]]
    with Pool(job["workers"]) as pool:
        for r in pool.imap(contest, work, chunksize=1):
            print(json.dumps(r), flush=True)


if __name__ == "__main__":
    main()
