"""Joint input-output estimate of a plant in closed loop, P = S_yr / S_ur (Wellstead 1981).

Noise that circulates in a loop reaches the plant's input, but not the excitation r injected from
outside: the ratio of the two cross spectra with r is consistent where the direct estimate is not
(P. E. Wellstead, Automatica 17(1), 1981; R. Pintelon and J. Schoukens, System Identification: A
Frequency Domain Approach, 2nd ed., Wiley 2012, chapter 2). It is also free of the bias that noise
on a measured input brings.
"""

from identkit.methods.averaged_spectra import AveragedSpectra
from identkit.methods.instrumental_response import EstimatedResponse, instrumental_response


def joint_response(
    spectra: AveragedSpectra, excitations: list[int], inputs: list[int], outputs: list[int]
) -> EstimatedResponse:
    """Return the plant's response from excitation, input and output spectra.

    Parameters
    ----------
    spectra
        Averaged spectra of all channels.
    excitations
        Places of signals injected from outside the loop, at least as many as inputs.
    inputs, outputs
        Places of the plant's inputs and outputs.

    Raises
    ------
    ValueError
        If there are fewer excitations than inputs, or no more averages than inputs.

    Notes
    -----
    The estimate is a ratio of noisy spectra; where the excitation explains little of the input
    (`weak`) it has no finite variance, and the stated one does not hold.
    """
    return instrumental_response(spectra, excitations, inputs, outputs)
