"""What is wrong with an input, said in one line.

Every rule about arguments and files that can be stated in a sentence raises
`InputError`; the command line prints it and exits with 2.
"""

import math
import numbers
import sys

LARGEST_FLOAT = sys.float_info.max


class InputError(ValueError):
    """A parameter or file that breaks a rule.

    Attributes
    ----------
    parameter : str
        Name of the parameter, or path of the file.
    rule : str
        What it must be.
    received : str
        What it was.
    remedy : str
        What to do about it; may be empty.
    """

    def __init__(self, parameter, rule, received, remedy=""):
        self.parameter = str(parameter)
        self.rule = rule
        self.received = _one_line(str(received))[:200]
        self.remedy = remedy
        line = f"{self.parameter}: {rule}; received {self.received}"
        super().__init__(_one_line(f"{line}; {remedy}" if remedy else line))

    def __reduce__(self):
        return type(self), (self.parameter, self.rule, self.received, self.remedy)


def check_number(name, value, *, low=-math.inf, high=math.inf, remedy=""):
    """Return `value` as a float in [low, high], or raise `InputError`."""
    proper = isinstance(value, numbers.Real) and not isinstance(value, bool)
    if not proper or not max(low, -LARGEST_FLOAT) <= value <= min(high, LARGEST_FLOAT):
        raise InputError(name, f"must be a number from {low:g} to {high:g}", _shown(value), remedy)
    return float(value)


def check_whole(name, value, *, low=0, high=None, remedy=""):
    """Return `value` as an int in [low, high] (no upper limit: None), or raise `InputError`."""
    proper = isinstance(value, numbers.Integral) and not isinstance(value, bool)
    if not proper or value < low or (high is not None and value > high):
        limit = f"of at least {low}" if high is None else f"from {low} to {high}"
        raise InputError(name, f"must be a whole number {limit}", _shown(value), remedy)
    return int(value)


def check_choice(name, value, choices):
    """Return `value` if it is among `choices`, or raise `InputError`."""
    if not isinstance(value, str) or value not in choices:
        raise InputError(name, f"must be one of {', '.join(choices)}", repr(value))
    return value


def check_keys(name, given, known):
    """Refuse keys of the mapping `given` that are not in `known`."""
    for key in given:
        if key not in known:
            raise InputError(name, f"knows the keys {', '.join(known)}", repr(key), "correct or remove it")


def _shown(value):
    try:
        return repr(value)
    except ValueError:
        return "a number of thousands of digits"


def _one_line(text):
    """Text from anywhere, a terminal's control characters escaped, as one line."""
    signs = (sign if sign.isprintable() or sign.isspace() else ascii(sign)[1:-1] for sign in text)
    return " ".join("".join(signs).split())
