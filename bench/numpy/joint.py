"""Joint extraction as a practised observer would write it with numpy and scipy: whole blocks of 64 columns in array
expressions, and a banded solve for each column.

The work is that of the kernels and of bench/loop: profile weights at six nodes a block and a polynomial between them, first fit
on the data's noise, rounds of rejection and of variance from the model, background surface, variances and neighbours'
covariances from the inverse's band, flags, reduced chi-square, suspects. In double precision.

    python3 joint.py DIR      reads DIR/job.json and the arrays named there, writes the results beside them,
                              prints the seconds of the extraction alone, the clock's and the processor's, as JSON
"""
import json
import sys
import time

import numpy as np
from scipy.linalg import cho_solve_banded, cholesky_banded, solveh_banded
from scipy.special import erf

COSMIC, SUSPECT, GROWN, MISSING = 8, 16, 32, 4
LEAST_SHARE, WING_SHARE, REACH_ROWS, CLUSTER_ROWS = 0.01, 0.02, 2, 2


def legendre(coefficients, x):
    return np.polynomial.legendre.legval(x, coefficients.T)


class Frame:
    def __init__(self, folder, job):
        self.__dict__.update(job)
        shape = (self.ny, self.nx)
        read = lambda name, dtype: np.fromfile(f"{folder}/{name}", dtype=dtype)
        self.electrons = read("electrons", "f4").reshape(shape)
        self.mask = read("mask", "u1").reshape(shape)
        self.band_of_row = read("bandOfRow", "u1")
        self.fixed = read("fixedVariance", "f4").reshape(-1, self.nx)
        self.trace = read("trace", "f8").reshape(self.nFibre, -1)
        self.width = read("width", "f8").reshape(self.nFibre, -1)
        self.surface = read("background", "f8").reshape(self.nBackgroundX, self.nBackgroundY)
        self.n_window = 2 * self.halfWindow + 1
        images = ["flux", "variance", "neighbourCovariance", "chi2", "background"]
        self.out = {name: np.full((self.nFibre, self.nx), np.nan, "f4") for name in images}
        self.out["flags"] = np.zeros((self.nFibre, self.nx), "i4")
        self.out["rejected"] = np.zeros(shape, "u1")

    def scaled(self, pixel, n):
        return 2 * np.asarray(pixel, float) / (n - 1) - 1


def extract(frame):
    pivots = np.empty((3, frame.nFibre, frame.nx))
    row_terms = np.polynomial.legendre.legvander(frame.scaled(np.arange(frame.ny), frame.ny), frame.nBackgroundY - 1)
    for x0 in range(0, frame.nx, frame.blockColumns):
        block = Block(frame, x0, row_terms)
        block.settle()
        block.write(pivots)
    covariance(frame, pivots)


class Block:
    """Columns x0 … x0 + n − 1; rows with a margin of one window beyond each end of the frame; arrays [n, row] and
    [n, fibre, pixel of the window]."""

    def __init__(self, frame, x0, row_terms):
        self.frame, self.x0 = frame, x0
        self.columns = np.arange(x0, min(x0 + frame.blockColumns, frame.nx))
        n, margin = len(self.columns), frame.n_window
        self.inside = slice(margin, margin + frame.ny)
        rows = (n, frame.ny + 2 * margin)
        self.background, self.light = np.zeros(rows), np.zeros(rows)
        self.fixed, self.bits = np.ones(rows), np.full(rows, MISSING, "u1")
        self.profiles()
        span = slice(x0, x0 + n)
        column_terms = np.polynomial.legendre.legvander(frame.scaled(self.columns, frame.nx), frame.nBackgroundX - 1)
        self.background[:, self.inside] = column_terms @ frame.surface @ row_terms.T
        electrons, mask = frame.electrons[:, span].T, frame.mask[:, span].T
        self.bits[:, self.inside] = np.where((mask == 0) & ~np.isfinite(electrons), MISSING, mask)
        self.fixed[:, self.inside] = frame.fixed[frame.band_of_row, span].T
        light = electrons - self.background[:, self.inside]
        self.light[:, self.inside] = np.where(self.bits[:, self.inside] == 0, light, 0)

    def profiles(self):
        frame, n = self.frame, self.frame.n_window
        size = frame.blockColumns
        nodes = (size - 1) / 2 + size / 2 * np.cos(np.pi * np.arange(11, 0, -2) / 12)
        t = frame.scaled(self.x0 + nodes, frame.nx)
        y = np.stack([legendre(frame.trace, u) for u in t])
        sigma = np.stack([legendre(frame.width, u) for u in t])
        start = np.floor(y.mean(0) + 0.5).astype(int) - frame.halfWindow
        self.start = np.clip(start, -n, frame.ny)
        edges = np.arange(n + 1) - 0.5 + (self.start - y)[:, :, None]
        at_nodes = 0.5 * np.diff(erf(edges / (np.sqrt(2) * sigma[:, :, None])), axis=2)
        offsets = np.arange(len(self.columns))
        shares = np.ones((len(offsets), len(nodes)))
        for own in range(len(nodes)):
            for other in range(len(nodes)):
                if other != own:
                    shares[:, own] *= (offsets - nodes[other]) / (nodes[own] - nodes[other])
        self.weights = np.tensordot(shares, at_nodes, 1)
        self.centre = self.start + np.tensordot(shares, y - self.start, 1)
        self.rows = n + self.start[:, None] + np.arange(n)
        # Weights of the next lower fibres, moved onto the rows of each fibre's own window.
        self.lower = []
        for j in range(1, frame.bandwidth + 1):
            ahead = self.start[j:] - self.start[:-j]
            pixel = np.arange(n) + ahead[:, None]
            moved = np.take_along_axis(self.weights[:, :-j], np.broadcast_to(np.minimum(pixel, n - 1), (len(offsets), *pixel.shape)), 2)
            self.lower.append(np.where(pixel < n, moved, 0))
        # Lowest fibre whose window ends above the row: no two windows begin on one row.
        self.lowest = np.searchsorted(n + self.start + n, np.arange(self.light.shape[1]), side="right")

    def settle(self):
        frame = self.frame
        self.weigh(self.light)
        self.fit()
        self.last_change = np.zeros_like(self.flux)
        for turn in range(frame.maxRounds):
            excess = self.excess()
            worst = excess > frame.kappa**2
            if worst.any():
                for j in range(1, CLUSTER_ROWS + 1):
                    worst[:, j:] &= excess[:, :-j] < excess[:, j:]
                    worst[:, :-j] &= excess[:, j:] <= excess[:, :-j]
                self.bits[worst] |= COSMIC
            if turn >= frame.minRounds and not worst.any() and (self.last_change**2 * self.band[:, -1] <= 0.01).all():
                break
            self.weigh(self.model)
            before = self.flux
            self.fit()
            self.last_change = self.flux - before

    def weigh(self, light):
        variance = self.fixed + np.maximum(light + self.background, 0)
        self.inverse = np.where(self.bits == 0, 1 / variance, 0)

    def fit(self):
        """self.band: [n, bandwidth + 1, nFibre], upper form of scipy's banded storage."""
        frame, b = self.frame, self.frame.bandwidth
        inverse = self.inverse[:, self.rows]
        weighted = self.weights * inverse
        measured = (self.weights * (inverse > 0)).sum(2) >= LEAST_SHARE
        band = np.zeros((len(self.columns), b + 1, frame.nFibre))
        band[:, b] = np.where(measured, np.einsum("ckp,ckp->ck", weighted, self.weights), 1)
        for j in range(1, b + 1):
            both = measured[:, j:] & measured[:, :-j]
            band[:, b - j, j:] = np.where(both, np.einsum("ckp,ckp->ck", weighted[:, j:], self.lower[j - 1]), 0)
        rhs = np.where(measured, np.einsum("ckp,ckp->ck", weighted, self.light[:, self.rows]), 0)
        self.measured, self.band, self.rhs = measured, band, rhs
        self.flux = np.stack([solveh_banded(m, r, check_finite=False) for m, r in zip(band, rhs)])
        self.model = self.spread(self.flux, self.weights)

    def spread(self, numbers, weights):
        """Sum over the fibres of numbers · weights, on the rows; no two windows begin on one row."""
        out = np.zeros_like(self.light)
        for i in range(self.frame.n_window):
            out[:, self.rows[:, i]] += numbers * weights[:, :, i]
        return out

    def excess(self):
        padded = np.pad(np.abs(self.model), ((0, 0), (REACH_ROWS, REACH_ROWS)))
        n = self.model.shape[1]
        near = np.maximum.reduce([padded[:, i : i + n] for i in range(2 * REACH_ROWS + 1)])
        running = np.pad(np.cumsum(np.abs(self.flux), axis=1), ((0, 0), (1, 0)))
        end = np.minimum(self.lowest + self.frame.bandwidth + 1, self.frame.nFibre)
        slack = self.frame.profileError * (near + WING_SHARE * (running[:, end] - running[:, self.lowest]))
        variance = self.fixed + np.maximum(self.model + self.background, 0)
        excess = np.maximum(self.light - self.model, 0)
        return np.where(self.bits == 0, excess**2 / (variance + slack**2), 0)

    def write(self, pivots):
        frame, out = self.frame, self.frame.out
        span = slice(self.x0, self.x0 + len(self.columns))
        for c, x in enumerate(self.columns):
            factor = cholesky_banded(self.band[c], check_finite=False)
            self.flux[c] = cho_solve_banded((factor, False), self.rhs[c], check_finite=False)
            pivots[:, :, x] = factor
        residual = (self.light - self.model) ** 2 * self.inverse
        covered = self.spread(np.ones_like(self.flux), self.weights)
        good = self.inverse > 0
        free = np.where(good, 1 - covered, 0)[:, self.rows].sum(2)
        with np.errstate(invalid="ignore", divide="ignore"):
            chi2 = np.where(free > 0.5, residual[:, self.rows].sum(2) / free, np.nan)
        flags = self.flags(good)
        middle = np.clip(self.rows[:, frame.halfWindow], frame.n_window, frame.n_window + frame.ny - 1)
        out["flux"][:, span], out["chi2"][:, span], out["flags"][:, span] = self.flux.T, chi2.T, flags.T
        out["background"][:, span] = self.background[:, middle].T
        suspect = np.where(self.excess() > frame.growKappa**2, SUSPECT, 0)
        out["rejected"][:, span] = ((self.bits & COSMIC) | suspect)[:, self.inside].T

    def flags(self, good):
        """All but what needs the variance."""
        bits = self.bits[:, self.rows]
        share = lambda which: (self.weights * ((bits & which) != 0)).sum(2)
        flags = np.where(share(COSMIC | GROWN) > 0.01, 1, 0) | np.where(share(1 | MISSING) > 0.01, 2, 0)
        saturated = share(2) > 0.01
        flags |= np.where(saturated, 256, 0) | np.where(share(255) > 0.5, 512, 0)
        beside = np.zeros_like(saturated)
        beside[:, 1:] |= saturated[:, :-1]
        beside[:, :-1] |= saturated[:, 1:]
        inside = (self.centre >= -0.5) & (self.centre < self.frame.ny - 0.5)
        moved = self.last_change**2 * self.band[:, -1]
        return flags | np.where(beside, 4, 0) | np.where(inside, 0, 2048) | np.where(moved > 0.01, 16, 0) | np.where(self.measured, 0, 512)


def covariance(frame, factors):
    """Diagonal and first subdiagonal of every column's inverse (Takahashi, Fagan & Chen 1973) from the Cholesky factors, all
    columns at once."""
    out, n = frame.out, frame.nFibre
    inverse_pivot = 1 / factors[2]
    zero = np.zeros(frame.nx)
    own1, own2, between = zero, zero, zero
    below = np.zeros((n + 1, frame.nx))
    for k in range(n - 1, -1, -1):
        l1 = factors[1, k + 1] * inverse_pivot[k] if k + 1 < n else zero
        l2 = factors[0, k + 2] * inverse_pivot[k] if k + 2 < n else zero
        further = -l1 * between - l2 * own2
        below[k + 1] = -l1 * own1 - l2 * between
        own = inverse_pivot[k] ** 2 - l1 * below[k + 1] - l2 * further
        out["variance"][k] = own
        own1, own2, between = own, own1, below[k + 1]
    unusable = (out["flags"] & (512 | 2048)) != 0
    for name in ("flux", "variance", "chi2"):
        out[name][unusable] = np.nan
    out["neighbourCovariance"][:-1] = np.where(unusable[:-1] | unusable[1:], np.nan, below[1:n])


def main(folder):
    with open(f"{folder}/job.json") as file:
        frame = Frame(folder, json.load(file))
    began, began_processor = time.perf_counter(), time.process_time()
    extract(frame)
    took = {"clock": time.perf_counter() - began, "processor": time.process_time() - began_processor}
    for name, image in frame.out.items():
        image.tofile(f"{folder}/{name}.out")
    print(json.dumps(took))


main(sys.argv[1])
