"""Direct estimates of a frequency response for noise on the output or on the input.

H1 = S_yu / S_uu is consistent when only the output is noisy, H2 = S_yy / S_uy when only the input
is (J. S. Bendat and A. G. Piersol, Random Data, Wiley, chapters 6 and 9; L. D. Mitchell, Improved
methods for the fast Fourier transform (FFT) calculation of the frequency response function,
J. Mechanical Design 104, 1982). With noise-to-signal ratio a on the input and b on the output they
tend to H / (1 + a) and H (1 + b).
"""

from identkit.methods.averaged_spectra import AveragedSpectra
from identkit.methods.instrumental_response import EstimatedResponse, instrumental_response


def output_noise_response(
    spectra: AveragedSpectra, inputs: list[int], outputs: list[int]
) -> EstimatedResponse:
    """Return the estimate for noise on the output only, in open loop (H1).

    Raises
    ------
    ValueError
        If there are no more averages than inputs.

    Notes
    -----
    Does not apply in closed loop, where the noise is correlated with the input (`direct_bias`).
    """
    return instrumental_response(spectra, inputs, inputs, outputs)


def input_noise_response(
    spectra: AveragedSpectra, inputs: list[int], outputs: list[int]
) -> EstimatedResponse:
    """Return the estimate for noise on the input only (H2).

    Raises
    ------
    ValueError
        If there are fewer outputs than inputs, or no more averages than inputs.
    """
    return instrumental_response(spectra, outputs, inputs, outputs)
