"""Validation shared by every public function: one InputError per kind of mistake."""

import difflib
import math
import numbers

import numpy as np

from offbody.errors import InputError


def as_number(name, value, *, positive=False, least=None, greatest=None):
    """A finite float, or an InputError that names the argument."""
    if isinstance(value, (bool, np.bool_)) or not isinstance(value, numbers.Real):
        if not (isinstance(value, np.ndarray) and value.ndim == 0 and value.dtype.kind in "iuf"):
            raise InputError(f"{name} must be a number, got {value!r}")
    try:
        number = float(value)
    except OverflowError:
        raise InputError(f"{name} is too large for a number, got {str(value)[:20]}...") from None
    if not math.isfinite(number):
        raise InputError(f"{name} must be finite, got {value!r}")
    if positive and number <= 0:
        raise InputError(f"{name} must be greater than zero, got {value!r}")
    if least is not None and number < least:
        raise InputError(f"{name} must be at least {least}, got {value!r}")
    if greatest is not None and number > greatest:
        raise InputError(f"{name} must be at most {greatest}, got {value!r}")
    return number


def as_count(name, value, *, least, greatest=None):
    """A whole number within limits, or an InputError that names the argument."""
    if isinstance(value, (bool, np.bool_)) or not isinstance(value, numbers.Integral):
        raise InputError(f"{name} must be a whole number, got {value!r}")
    if value < least or (greatest is not None and value > greatest):
        limits = f"at least {least}" if greatest is None else f"from {least} to {greatest}"
        raise InputError(f"{name} must be {limits}, got {value!r}")
    return int(value)


def as_reals(name, value):
    """A float64 array of finite numbers of any shape, or an InputError that says where not."""
    try:
        array = np.asarray(value)
    except ValueError as error:
        raise InputError(f"{name} must be an array of numbers: {error}") from None
    if array.size == 0 and array.dtype.kind == "f":
        return array.astype(float)
    if array.dtype.kind not in "iuf":
        raise InputError(f"{name} must hold real numbers, got dtype {array.dtype}")
    array = array.astype(float)
    if not np.isfinite(array).all():
        first = np.argwhere(~np.isfinite(array))[0]
        place = ", ".join(str(i) for i in first)
        raise InputError(f"{name} must be finite; entry [{place}] is {array[tuple(first)]:g}")
    return array


def as_points(name, value):
    """A float64 array of shape (..., 2), or an InputError."""
    array = as_reals(name, value)
    if array.ndim == 0 or array.shape[-1] != 2:
        raise InputError(
            f"{name} must have shape (..., 2), one x and one y per point; got shape {array.shape}"
        )
    return array


def as_point(name, value):
    """One point as a float64 array of shape (2,), or an InputError."""
    array = as_points(name, value)
    if array.shape != (2,):
        raise InputError(f"{name} must be one point (x, y); got shape {array.shape}")
    return array


def as_directions(name, value):
    """Directions in degrees: a float64 scalar array or a vector, or an InputError."""
    array = as_reals(name, value)
    if array.ndim > 1:
        raise InputError(
            f"{name} must be one number or a vector of degrees; got shape {array.shape}"
        )
    return array


def as_body(name, value, bodies):
    """The index of a body in the model, or an InputError that says which there are."""
    if isinstance(value, (bool, np.bool_)) or not isinstance(value, numbers.Integral):
        raise InputError(f"{name} must be the index of a body, got {value!r}")
    if not -bodies <= value < bodies:
        last = "only body 0" if bodies == 1 else f"bodies 0 to {bodies - 1}"
        raise InputError(f"{name} = {value!r}: the model has {last}")
    return int(value) % bodies


def nearest_name(word, names):
    """A sentence naming the closest of ``names`` to a misspelt word, or listing them all."""
    close = difflib.get_close_matches(str(word), list(names), n=1, cutoff=0.6)
    if close:
        return f"did you mean {close[0]!r}?"
    return "known: " + ", ".join(sorted(names))
