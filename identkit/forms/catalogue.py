"""The forms of scalar sets by the name that a study gives them."""

from identkit.errors import InputError, Problem
from identkit.forms.additive import ADDITIVE
from identkit.forms.input_multiplicative import INPUT_MULTIPLICATIVE
from identkit.forms.inverse_multiplicative import INVERSE_MULTIPLICATIVE
from identkit.forms.multiplicative import MULTIPLICATIVE
from identkit.forms.scalar_form import ScalarForm

FORMS: dict[str, ScalarForm] = {
    form.name: form
    for form in (MULTIPLICATIVE, INPUT_MULTIPLICATIVE, ADDITIVE, INVERSE_MULTIPLICATIVE)
}


def form_named(name: str) -> ScalarForm:
    """Return a form by its name.

    Raises
    ------
    InputError
        If there is no such form of scalar sets.
    """
    if name not in FORMS:
        known = " or ".join(f'"{each}"' for each in FORMS)
        raise InputError(Problem("[bound] form", repr(name), known))
    return FORMS[name]
