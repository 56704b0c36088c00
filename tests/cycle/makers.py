"""Captures for the tests of the cycle stage."""

from __future__ import annotations

import numpy as np

from benchfit.capture.model import Capture, Channel


def train(x_up=3.0, x_down=3.0, cycles=5.3, samples=2000, noise=0.01, phase=0.3, seed=0, lower=-1.0, upper=1.0, tau=1.0):
    """A closed-form exponential train with known truth (legitimate for studies of the estimator alone).

    x = (A − S)/(A − E) of the rising and of the falling phase; noise as a share of the swing.
    """
    swing = upper - lower
    a_up = lower + swing * x_up / (x_up - 1)
    a_down = upper - swing * x_down / (x_down - 1)
    t_up, t_down = tau * np.log(x_up), tau * np.log(x_down)
    period = t_up + t_down
    dt = cycles * period / samples
    t = np.arange(samples) * dt
    u = np.mod(t + phase * period, period)
    v = np.where(u < t_up, a_up - (a_up - lower) * np.exp(-u / tau), a_down - (a_down - upper) * np.exp(-(u - t_up) / tau))
    rng = np.random.default_rng(seed)
    v = v + noise * swing * rng.standard_normal(samples)
    truth = dict(period=period, charge_share=t_up / period, upper=upper, lower=lower, charge_curvature=1 / tau, discharge_curvature=1 / tau)
    return Capture("train", dt, 0.0, (Channel("CH1", "V", v, 0.0),)), truth
