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
        self,
        first_rad: FloatArray,
        step_s: FloatArray,
        theta: FloatArray,
        divisions: int,
        lost_s: FloatArray | None = None,
    ) -> None:
        lanes, self.width = theta.shape
        step = step_s / divisions
        self.scale = np.ones((self.width, lanes))
        self.scale[:3] = step
        ramp = theta[:, 5] if self.width == 6 else np.zeros(lanes)
        if self.width == 6:
            self.scale[5] = step * step_s
        sensor = np.exp(theta[:, 4])
        # A band that smooths psi takes D lost_s off the measurement noise, below zero if need be.
        smooth = np.exp(theta[:, 3]) * (0.0 if lost_s is None else lost_s)
        noise = sensor - smooth
        self.fixed = np.stack(
            [
                theta[:, 0] * step,
                theta[:, 1] * step,
                theta[:, 2] * step,
                2.0 * np.exp(theta[:, 3]) * step,
                noise,
                ramp * step * step_s,
                sensor,
                smooth,
            ]
        )
        self.divisions = divisions
        self.z_all = np.zeros((2, 1 + self.width, lanes))
        self.z_all[0, 0] = first_rad
        self.z_all[1, 0] = noise
        self.z_all[1, 4] = -smooth
        self.z_all[1, 5] = sensor
        self.loglik_all = np.zeros(lanes)
        self.score_all = np.zeros((self.width, lanes))
        self.information_all = np.zeros((2, self.width, self.width, lanes))
        self.stages_all = np.empty((5, 10, lanes))
        self.rows_all = np.empty((3, self.width, lanes))
        self.outer_all = np.empty_like(self.information_all)
        self.lanes = -1

    def narrow(self, lanes: int) -> None:
        """Keep the first lanes only, as views."""
        if lanes == self.lanes:
            return
        self.lanes = lanes
        self.dw, self.a, self.b, self.d2, self.noise, self.ramp = self.fixed[:6, :lanes]
        self.sensor, self.smooth = self.fixed[6:, :lanes]
        self.z = self.z_all[..., :lanes]
        self.stages = self.stages_all[..., :lanes]
        self.rows = self.rows_all[..., :lanes]
        self.outer = self.outer_all[..., :lanes]
        self.information = self.information_all[..., :lanes]

    def advance(self, start: float) -> None:
        """One step of mean, variance and derivatives; ``start`` is its beginning in samples.

        Mean and variance by RK4. Their derivatives obey a linear system whose coefficients
        are averaged over the four stages; its solution is expanded to third order in the
        step. That leaves 0.5 % of a derivative at the longest step, which the sums of
        innovations average out: the gradient is good to 0.01 of a standard error.
        """
        mean, variance = self.z[0, 0], self.z[1, 0]
        k1, k2, k3, k4, total = self.stages
        half, whole = 0.5 / self.divisions, 1.0 / self.divisions
        self.slope(mean, variance, start, k1)
        self.slope(mean + 0.5 * k1[0], variance + 0.5 * k1[1], start + half, k2)
        self.slope(mean + 0.5 * k2[0], variance + 0.5 * k2[1], start + half, k3)
        self.slope(mean + k3[0], variance + k3[1], start + whole, k4)
        np.add(k2, k3, out=total)
        total *= 2.0
        total += k1
        total += k4
        total *= 1.0 / 6.0
        self.carry(total, start + half)
        mean += total[0]
        variance += total[1]

    def slope(self, mean: FloatArray, variance: FloatArray, at: float, out: FloatArray) -> None:
        """Put the time derivatives into ``out``, and what the derivatives by parameters need.

        Rows: m', P', g, f, P f, P g, cos, sin, P cos, P sin, where cos and sin are averaged
        over the Gaussian, f = a cos + b sin and g = b cos - a sin.
        """
        damping = np.exp(-0.5 * variance)
        np.multiply(np.cos(mean), damping, out=out[6])
        np.multiply(np.sin(mean), damping, out=out[7])
        np.multiply(self.a, out[6], out=out[3])
        out[3] += self.b * out[7]
        np.multiply(self.b, out[6], out=out[2])
        out[2] -= self.a * out[7]
        np.multiply(variance, out[3], out=out[4])
        np.multiply(variance, out[2], out=out[5])
        np.multiply(variance, out[6], out=out[8])
        np.multiply(variance, out[7], out=out[9])
        np.add(self.dw, out[3], out=out[0])
        if self.width == 6:
            out[0] += self.ramp * at
        np.multiply(out[5], 2.0, out=out[1])
        out[1] += self.d2

    def carry(self, average: FloatArray, middle: float) -> None:
        """Carry the derivatives over one step with coefficients averaged over it.

        (dm, dP)' = A (dm, dP) + forcing, A = ((g, -f/2), (-2 P f, 2 g - P g)); over a step
        (dm, dP) += E (A (dm, dP) + forcing) with E = 1 + A/2 + A^2/6.
        """
        _, _, g, f, pf, pg, cosine, sine, p_cosine, p_sine = average
        a01, a10, a11 = -0.5 * f, -2.0 * pf, 2.0 * g - pg
        cross = a01 * a10
        trace = g + a11
        e00 = 1.0 + 0.5 * g + (g * g + cross) * (1.0 / 6.0)
        e11 = 1.0 + 0.5 * a11 + (a11 * a11 + cross) * (1.0 / 6.0)
        common = 0.5 + trace * (1.0 / 6.0)
        e01, e10 = common * a01, common * a10
        d_mean, d_variance, (push, pull, spare) = self.z[0, 1:], self.z[1, 1:], self.rows
        np.multiply(d_mean, g, out=push)
        np.multiply(d_variance, a01, out=spare)
        push += spare
        np.multiply(d_variance, a11, out=pull)
        np.multiply(d_mean, a10, out=spare)
        pull += spare
        push[0] += 1.0
        push[1] += cosine
        push[2] += sine
        pull[1] -= 2.0 * p_sine
        pull[2] += 2.0 * p_cosine
        pull[3] += self.d2
        if self.width == 6:
            push[5] += middle
        d_mean += e00 * push
        d_variance += e10 * push
        np.multiply(pull, e01, out=spare)
        d_mean += spare
        pull *= e11
        d_variance += pull

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
        d_variance[3] -= self.smooth
        d_variance[4] += self.sensor
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
        d_state[3] -= gain * self.smooth
        d_state[4] += gain * self.sensor
        np.multiply(gain, self.noise, out=z[1, 0])
