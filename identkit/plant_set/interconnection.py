"""Interconnections of the forms with one dynamic block, weights absorbed.

Output multiplicative, P = (I + L Delta R) P0: inputs are [w = Delta z, u], outputs [z = R P0 u,
y = P0 u + L w]. A worked example with two blocks: let the actuator gain k = 2 + 0.3 delta (real
factor "gain") stand in front of the same plant, P = (1 + W Delta) P0 (2 + 0.3 delta). Take
w1 = delta z1 with z1 = u, and w2 = Delta z2 with z2 = P0 (2 u + 0.3 w1); then y = z2 + W w2.
Inputs are [w1, w2, u], outputs [z1, z2, y],

    M = [[0,      0, 1   ],
         [0.3 P0, 0, 2 P0],
         [0.3 P0, W, 2 P0]],

blocks = [{real-repeated, 1 x 1, "gain"}, {complex-full, 1 x 1}], and P is the upper LFT of M with
diag(delta, Delta), positive feedback.
"""

import numpy as np

from identkit.plant_set.fields import Block, FloatArray, Interconnection, Matrices


def output_multiplicative(nominal: Matrices, left: Matrices, right: Matrices) -> Interconnection:
    """Return the interconnection of (I + L Delta R) P0 with the states of P0, L and R, in order.

    Parameters
    ----------
    nominal
        P0, outputs x inputs.
    left, right
        L (outputs x rows of Delta) and R (columns of Delta x outputs).
    """
    n, w, r = nominal.states, left.states, right.states
    rows, columns = left.D.shape[1], right.D.shape[0]
    drift = _diagonal3(nominal.A, left.A, right.A)
    drift[n + w :, :n] = right.B @ nominal.C
    driven = np.zeros((n + w + r, rows + nominal.D.shape[1]))
    driven[:n, rows:] = nominal.B
    driven[n : n + w, :rows] = left.B
    driven[n + w :, rows:] = right.B @ nominal.D
    outputs = nominal.D.shape[0]
    seen = np.zeros((columns + outputs, n + w + r))
    seen[:columns, :n], seen[:columns, n + w :] = right.D @ nominal.C, right.C
    seen[columns:, :n], seen[columns:, n : n + w] = nominal.C, left.C
    feed = np.zeros((columns + outputs, driven.shape[1]))
    feed[:columns, rows:] = right.D @ nominal.D
    feed[columns:, :rows], feed[columns:, rows:] = left.D, nominal.D
    block = Block("complex-full", rows, columns)
    return Interconnection(drift, driven, seen, feed, blocks=(block,))


def additive(nominal: Matrices, left: Matrices, right: Matrices) -> Interconnection:
    """Return the interconnection of P0 + L Delta R: z = R u, y = P0 u + L w.

    Parameters
    ----------
    nominal
        P0, outputs x inputs.
    left, right
        L (outputs x rows of Delta) and R (columns of Delta x inputs).
    """
    n, w, r = nominal.states, left.states, right.states
    rows, columns = left.D.shape[1], right.D.shape[0]
    outputs, inputs = nominal.D.shape
    driven = np.zeros((n + w + r, rows + inputs))
    driven[n : n + w, :rows] = left.B
    driven[:n, rows:], driven[n + w :, rows:] = nominal.B, right.B
    seen = np.zeros((columns + outputs, n + w + r))
    seen[:columns, n + w :] = right.C
    seen[columns:, :n], seen[columns:, n : n + w] = nominal.C, left.C
    feed = np.zeros((columns + outputs, rows + inputs))
    feed[:columns, rows:] = right.D
    feed[columns:, :rows], feed[columns:, rows:] = left.D, nominal.D
    block = Block("complex-full", rows, columns)
    drift = _diagonal3(nominal.A, left.A, right.A)
    return Interconnection(drift, driven, seen, feed, blocks=(block,))


def input_multiplicative(nominal: Matrices, left: Matrices, right: Matrices) -> Interconnection:
    """Return the interconnection of P0 (I + L Delta R): z = R u, y = P0 (u + L w).

    Parameters
    ----------
    nominal
        P0, outputs x inputs.
    left, right
        L (inputs x rows of Delta) and R (columns of Delta x inputs).
    """
    n, w, r = nominal.states, left.states, right.states
    rows, columns = left.D.shape[1], right.D.shape[0]
    outputs, inputs = nominal.D.shape
    drift = _diagonal3(nominal.A, left.A, right.A)
    drift[:n, n : n + w] = nominal.B @ left.C
    driven = np.zeros((n + w + r, rows + inputs))
    driven[:n, :rows], driven[n : n + w, :rows] = nominal.B @ left.D, left.B
    driven[:n, rows:], driven[n + w :, rows:] = nominal.B, right.B
    seen = np.zeros((columns + outputs, n + w + r))
    seen[:columns, n + w :] = right.C
    seen[columns:, :n], seen[columns:, n : n + w] = nominal.C, nominal.D @ left.C
    feed = np.zeros((columns + outputs, rows + inputs))
    feed[:columns, rows:] = right.D
    feed[columns:, :rows], feed[columns:, rows:] = nominal.D @ left.D, nominal.D
    block = Block("complex-full", rows, columns)
    return Interconnection(drift, driven, seen, feed, blocks=(block,))


def inverse_multiplicative(nominal: Matrices, left: Matrices, right: Matrices) -> Interconnection:
    """Return the interconnection of (I + L Delta R)^-1 P0: y = P0 u - L w, z = R y.

    Parameters
    ----------
    nominal
        P0, as many outputs as inputs.
    left, right
        L (outputs x rows of Delta) and R (columns of Delta x outputs).
    """
    n, w, r = nominal.states, left.states, right.states
    rows, columns = left.D.shape[1], right.D.shape[0]
    drift = _diagonal3(nominal.A, left.A, right.A)
    position = np.hstack([nominal.C, -left.C, np.zeros((nominal.D.shape[0], r))])
    direct = np.hstack([-left.D, nominal.D])
    drift[n + w :] += right.B @ position
    driven = np.zeros((n + w + r, direct.shape[1]))
    driven[:n, rows:], driven[n : n + w, :rows] = nominal.B, left.B
    driven[n + w :] = right.B @ direct
    seen = np.vstack([right.D @ position, position])
    seen[:columns, n + w :] += right.C
    feed = np.vstack([right.D @ direct, direct])
    block = Block("complex-full", rows, columns)
    return Interconnection(drift, driven, seen, feed, blocks=(block,))


def _diagonal3(first: FloatArray, second: FloatArray, third: FloatArray) -> FloatArray:
    sizes = [part.shape[0] for part in (first, second, third)]
    whole = np.zeros((sum(sizes), sum(sizes)))
    start = 0
    for part, size in zip((first, second, third), sizes, strict=True):
        whole[start : start + size, start : start + size] = part
        start += size
    return whole
