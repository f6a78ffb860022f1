"""Fits sweeps of a crystal unit with scipy.optimize.least_squares, as a second opinion and for its time.

Reads a list of problems as JSON and writes a list of results. The unit is R1, L1, fs and C0 behind a network whose sample is
open + gain I, I being the current of a source of one volt behind 'source' ohm. Settled sweeps come with an analytic derivative;
stepped ones, in which the resonator rings, are modelled by the natural frequency of unit and network, with differences for derivatives.
"""
import json
import sys
import time

import numpy as np
from scipy.optimize import least_squares


def settled(p):
    f = np.array(p["frequency"])
    measured = np.array(p["re"]) + 1j * np.array(p["im"])
    open_, gain, source = (complex(*p[k]) for k in ("open", "gain", "source"))
    start, sigma = p["start"], p["noise"] / np.sqrt(2)
    width = p["bandwidth"]
    w = 2 * np.pi * f
    offset = f - start["fs"]

    def parts(x):
        r, l = np.exp(x[1]), np.exp(x[2])
        d = offset - x[0] * width
        reactance = 2 * np.pi * l * d * (2 - d / f)
        z = r + 1j * reactance
        y = 1j * w * x[3] * start["c0"] + 1 / z
        return r, l, reactance, z, y, 1 + source * y

    def residual(x):
        *_, y, loop = parts(x)
        e = (open_ + gain * y / loop - measured) / sigma
        return np.concatenate((e.real, e.imag))

    def jacobian(x):
        r, l, reactance, z, y, loop = parts(x)
        by_y = gain / (loop * loop) / sigma
        by_z = -by_y / (z * z)
        fs = start["fs"] + x[0] * width
        columns = (by_z * (-4j * np.pi * l * fs / f * width), by_z * r, by_z * 1j * reactance, by_y * 1j * w * start["c0"])
        return np.stack([np.concatenate((c.real, c.imag)) for c in columns], axis=1)

    return residual, jacobian


def ringing(p):
    f = np.array(p["frequency"])
    measured = np.array(p["re"]) + 1j * np.array(p["im"])
    open_, gain, source = (complex(*p[k]) for k in ("open", "gain", "source"))
    start, sigma = p["start"], p["noise"] / np.sqrt(2)
    dwell, averaging, lead = p["dwell"], p["averaging"], p["lead_in"]

    def residual(x):
        fs = start["fs"] + x[0] * p["bandwidth"]
        r, l, c0 = np.exp(x[1]), np.exp(x[2]), x[3] * start["c0"]
        d = f - start["fs"] - x[0] * p["bandwidth"]
        y0 = 2j * np.pi * f * c0
        y = y0 + 1 / (r + 2j * np.pi * l * d * (2 - d / f))
        steady = y / (1 + source * y)
        q = 0j  # natural frequency from fs
        for _ in range(6):
            seen = source / (1 + source * 2j * np.pi * (fs + q) * c0)
            q = (r + seen) * (fs + q) / (-2j * np.pi * l * (2 * fs + q))
        spread = 1 + source * 2j * np.pi * (fs + q) * c0
        slope = 2j * np.pi * l * (1 + (fs / (fs + q)) ** 2) - (source / spread) ** 2 * 2j * np.pi * c0
        own = 1 / (spread * spread * slope) / (d - q)
        rate = 2j * np.pi * (q - d)
        wait = np.exp(rate * (dwell - averaging))
        rest = np.exp(rate * averaging)
        mean = wait * (rest - 1) / (rate * averaging)
        away = np.empty(len(f), complex)
        state = own[0] * (1 - np.exp(rate[0] * lead))
        for i in range(len(f)):
            away[i] = state - own[i]
            state = own[i] + away[i] * wait[i] * rest[i]
        e = (open_ + gain * (steady + away * mean) - measured) / sigma
        return np.concatenate((e.real, e.imag))

    return residual, "3-point"


def solve(p):
    residual, jacobian = settled(p) if p["dwell"] == 0 else ringing(p)
    start = p["start"]
    x0 = np.array([0.0, np.log(start["r1"]), np.log(start["l1"]), 1.0])
    options = dict(jac=jacobian, method="lm")
    if p["tolerance"] > 0:
        options.update(xtol=p["tolerance"], ftol=p["tolerance"], gtol=p["tolerance"])
    best, answer = float("inf"), None
    for _ in range(max(1, p["repeats"])):
        began = time.perf_counter()
        answer = least_squares(residual, x0, **options)
        covariance = np.linalg.inv(answer.jac.T @ answer.jac)
        best = min(best, time.perf_counter() - began)
    x = answer.x
    return {
        "fs_offset": x[0] * p["bandwidth"], "r1": float(np.exp(x[1])), "l1": float(np.exp(x[2])), "c0": x[3] * start["c0"],
        "seconds": best, "evaluations": int(answer.nfev), "sd_fs": float(np.sqrt(covariance[0, 0])) * p["bandwidth"],
    }


json.dump([solve(p) for p in json.load(sys.stdin)], sys.stdout)
