"""Bias of the direct estimate in closed loop, predicted and tested.

In a loop u = r - C y, y = P u + v the direct estimate S_yu / S_uu tends to
(P Phi_r - conj(C) Phi_v) / (Phi_r + |C|^2 Phi_v): to P without noise and to -1/C without excitation
(P. E. Wellstead, Automatica 17(1), 1981; L. Ljung, System Identification, Prentice Hall 1999,
chapter 13). From data its bias is its distance from the joint input-output estimate; whether that
distance is more than chance is the specification test of J. A. Hausman (Econometrica 46(6), 1978),
in which the variance of the difference is the difference of the variances.
"""

from dataclasses import dataclass

import numpy as np
from scipy.stats import chi2

from identkit.methods.arrays import ComplexArray, FloatArray
from identkit.methods.instrumental_response import EstimatedResponse


@dataclass(frozen=True)
class DirectBias:
    """What the direct estimate is predicted to be off by.

    Attributes
    ----------
    bias
        (lines, outputs, inputs) direct less joint estimate, with the errors of both.
    share_of_error
        Root-mean-square bias over the direct estimate's standard error, chance taken out.
    chance
        Probability of a difference as large as this without bias.
    """

    bias: ComplexArray
    share_of_error: float
    chance: float

    @property
    def matters(self) -> bool:
        """Whether the bias is real and exceeds the error stated beside the estimate."""
        return self.chance < 1e-3 and self.share_of_error > 1.0


def closed_loop_limit(
    plant: ComplexArray,
    controller: ComplexArray,
    excitation_power: FloatArray,
    noise_power: FloatArray,
) -> ComplexArray:
    """Return what the direct estimate tends to in the loop u = r - C y, y = P u + v.

    Parameters
    ----------
    plant, controller
        P and C at each frequency.
    excitation_power, noise_power
        Spectra of r (at the plant's input) and of v (at its output).
    """
    numerator = plant * excitation_power - np.conj(controller) * noise_power
    return np.asarray(numerator / (excitation_power + np.abs(controller) ** 2 * noise_power))


def direct_bias(direct: EstimatedResponse, joint: EstimatedResponse) -> DirectBias:
    """Predict the bias of the direct estimate from the joint one of the same spectra.

    Parameters
    ----------
    direct, joint
        Estimates from the same spectra (`direct_response`, `joint_input_output`).

    Returns
    -------
    DirectBias
        Judged over the lines where the excitation is strong enough.
    """
    bias = direct.response - joint.response
    own = joint.variance * (1.0 - joint.strength)[:, None, None]
    # without a loop the input is the excitation to the last digit, and there is nothing to judge
    judged = np.isfinite(bias) & (own > 1e-9 * joint.variance) & ~joint.weak[:, None, None]
    judged[[0, -1]] = False
    if not judged.any():
        return DirectBias(bias, 0.0, 1.0)
    scaled = np.abs(bias[judged]) ** 2 / own[judged]
    excess = (np.abs(bias[judged]) ** 2 - own[judged]) / direct.variance[judged]
    pooled = 1.0 + 2.0 * float(np.sum(joint.correlation[1:] ** 2))
    freedom = 2.0 * scaled.size / pooled
    chance = float(chi2.sf(2.0 * scaled.sum() / pooled, freedom))
    return DirectBias(bias, float(np.sqrt(max(0.0, float(np.mean(excess))))), chance)
