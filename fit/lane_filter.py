"""The filter behind ``fit.likelihood``: mean, variance and their derivatives, lane by lane.

The equations stand in ``fit.likelihood``. Here is only the arithmetic, arranged so that one
call of numpy serves all lanes and all derivatives; time runs in sub-steps of each lane.
"""

from __future__ import annotations

import numpy as np

from rig.angles import wrap_rad
from rig.arrays import FloatArray


class FilterRun:
    """Filter of one chunk of lanes; time in sub-steps, rows of z: value, then derivatives.

    z[0] holds the mean and its derivatives, z[1] the variance and its derivatives. Lanes
    that have ended leave the views (``narrow``); their sums stay in the ``_all`` arrays.
    """

    def __init__(
        self, first_rad: FloatArray, step_s: FloatArray, theta: FloatArray, divisions: int
    ) -> None:
        lanes, self.width = theta.shape
        step = step_s / divisions
        self.scale = np.ones((self.width, lanes))
        self.scale[:3] = step
        ramp = theta[:, 5] if self.width == 6 else np.zeros(lanes)
        if self.width == 6:
            self.scale[5] = step * step_s
        noise = np.exp(theta[:, 4])
        self.fixed = np.stack(
            [
                theta[:, 0] * step,
                theta[:, 1] * step,
                theta[:, 2] * step,
                2.0 * np.exp(theta[:, 3]) * step,
                noise,
                ramp * step * step_s,
            ]
        )
        self.divisions = divisions
        self.z_all = np.zeros((2, 1 + self.width, lanes))
        self.z_all[0, 0] = first_rad
        self.z_all[1, 0] = noise
        self.z_all[1, 5] = noise
        self.loglik_all = np.zeros(lanes)
        self.score_all = np.zeros((self.width, lanes))
        self.information_all = np.zeros((2, self.width, self.width, lanes))
        self.work_all = np.empty((6, 2, 1 + self.width, lanes))
        self.outer_all = np.empty_like(self.information_all)
        self.lanes = -1

    def narrow(self, lanes: int) -> None:
        """Keep the first lanes only, as views."""
        if lanes == self.lanes:
            return
        self.lanes = lanes
        self.dw, self.a, self.b, self.d2, self.noise, self.ramp = self.fixed[:, :lanes]
        self.z = self.z_all[..., :lanes]
        self.work = self.work_all[..., :lanes]
        self.outer = self.outer_all[..., :lanes]
        self.information = self.information_all[..., :lanes]

    def advance(self, start: float) -> None:
        """One RK4 step; ``start`` is its beginning in samples (needed by the ramp)."""
        z, (k1, k2, k3, k4, trial, total) = self.z, self.work
        half, whole = 0.5 / self.divisions, 1.0 / self.divisions
        self.slope(z, start, k1)
        np.multiply(k1, 0.5, out=trial)
        trial += z
        self.slope(trial, start + half, k2)
        np.multiply(k2, 0.5, out=trial)
        trial += z
        self.slope(trial, start + half, k3)
        np.add(z, k3, out=trial)
        self.slope(trial, start + whole, k4)
        np.add(k2, k3, out=total)
        total *= 2.0
        total += k1
        total += k4
        total *= 1.0 / 6.0
        z += total

    def slope(self, z: FloatArray, at: float, out: FloatArray) -> None:
        """Put the time derivative of z into ``out``.

        With f and g the averaged sine and its slope, the derivatives of (m, P) obey a linear
        system with rows (g, -f/2) and (-2 P f, (2 - P) g), forced by the parameters.
        """
        mean, variance = z[0, 0], z[1, 0]
        damping = np.exp(-0.5 * variance)
        cosine = np.cos(mean)
        cosine *= damping
        sine = np.sin(mean)
        sine *= damping
        f = self.a * cosine + self.b * sine
        g = self.b * cosine - self.a * sine
        np.add(self.dw, f, out=out[0, 0])
        twice = 2.0 * variance
        np.multiply(twice, g, out=out[1, 0])
        out[1, 0] += self.d2
        d_mean, d_variance, spare = z[0, 1:], z[1, 1:], self.outer[0, 0]
        np.multiply(d_mean, g, out=out[0, 1:])
        np.multiply(d_variance, -0.5 * f, out=spare)
        out[0, 1:] += spare
        np.multiply(d_variance, (2.0 - variance) * g, out=out[1, 1:])
        np.multiply(d_mean, twice * f, out=spare)
        out[1, 1:] -= spare
        out[0, 1] += 1.0
        out[0, 2] += cosine
        out[0, 3] += sine
        out[1, 2] -= twice * sine
        out[1, 3] += twice * cosine
        out[1, 4] += self.d2
        if self.width == 6:
            out[0, 0] += self.ramp * at
            out[0, 6] += at

    def update(self, y: FloatArray, wrapped: bool) -> None:
        """Take one sample in: sums of the likelihood, then mean and variance after it."""
        z, lanes = self.z, self.lanes
        innovation = y - z[0, 0]
        if wrapped:
            innovation = wrap_rad(innovation)
        variance = z[1, 0] + self.noise
        inverse = 1.0 / variance
        chi = innovation * innovation * inverse
        self.loglik_all[:lanes] -= 0.5 * (np.log(2.0 * np.pi * variance) + chi)
        d_mean, d_state = z[0, 1:], z[1, 1:]
        d_variance = d_state.copy()
        d_variance[4] += self.noise
        root = np.sqrt(inverse)
        weights = np.stack([d_mean * root, d_variance * (inverse * np.sqrt(0.5))])
        score = d_mean * (innovation * inverse)
        score += d_variance * (0.5 * inverse * (chi - 1.0))
        self.score_all[:, :lanes] += score
        np.multiply(weights[:, :, None], weights[:, None, :], out=self.outer)
        self.information += self.outer
        gain = z[1, 0] * inverse
        d_gain = (d_state - gain * d_variance) * inverse
        keep = 1.0 - gain
        d_mean *= keep
        d_mean += d_gain * innovation
        z[0, 0] += gain * innovation
        np.multiply(d_gain, self.noise, out=d_state)
        d_state[4] += gain * self.noise
        np.multiply(gain, self.noise, out=z[1, 0])
