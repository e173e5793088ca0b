"""The two ways in which offbody speaks up."""


class InputError(ValueError):
    """An argument that cannot be used; the message names it, its value and the mend."""


class AccuracyWarning(UserWarning):
    """Numerical trouble that the caller can act on; the message says how."""
