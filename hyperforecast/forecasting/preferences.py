"""What the user prefers: old classes or new ones, now or later, fewer exemplars, and what to do where all is strange."""

import re
from dataclasses import asdict, dataclass

from hyperforecast.checks import InputError, check_keys, check_number

UNFAMILIAR = "try 4"
MOST_TRIED = 16


@dataclass(frozen=True)
class Preferences:
    """What advice is to care for, beside the plan; a device keeps them from update to update.

    Parameters
    ----------
    old_weight : float in [0, 1], optional
        Weight of the accuracy on classes that were known before; new ones have the rest. By default by class count:
        every class counts alike.
    now_weight : float in [0, 1]
        Weight of the outcome at this boundary; the rest is that of the two boundaries that follow. By default it is the
        mean of the three that counts.
    tolerance : float in [0, 1]
        Accuracy that may be given away for fewer exemplars: `kept_per_class` is the fewest whose expected outcome is
        within this of the best.
    unfamiliar : "constant", "warn", or "try 4" with another number from 2 to 16
        What to do at a boundary unlike the records: advise the best constant; go on with the advice, and warn; or try
        so many of the ranked settings side by side and keep the best on rows held back from training. That is the
        default, with four: where forecasts are out of their depth nothing tells as much as trying, the constant comes
        from the same records, and such boundaries are few.
    """

    old_weight: float | None = None
    now_weight: float = 1 / 3
    tolerance: float = 0.005
    unfamiliar: str = UNFAMILIAR

    def checked(self):
        """Return these preferences, with Python's own numbers, if they are valid, else raise `InputError`."""
        return Preferences(
            old_weight=None if self.old_weight is None else check_number("old_weight", self.old_weight, low=0, high=1),
            now_weight=check_number("now_weight", self.now_weight, low=0, high=1),
            tolerance=check_number("tolerance", self.tolerance, low=0, high=1),
            unfamiliar=_checked_unfamiliar(self.unfamiliar))

    @property
    def tried(self):
        """How many settings are tried at a boundary unlike the records."""
        return int(self.unfamiliar.removeprefix("try ")) if self.unfamiliar.startswith("try ") else 1

    def as_dict(self):
        """Return the preferences as a JSON-able dict."""
        return asdict(self)

    @classmethod
    def from_dict(cls, name, document):
        """Return the checked preferences in a dict of `as_dict`; `name` is what errors call it. Parts may be missing."""
        if not isinstance(document, dict):
            raise InputError(name, "must be preferences by name", document)
        check_keys(name, document, Preferences().as_dict())
        return cls(**document).checked()


def _checked_unfamiliar(text):
    number = re.fullmatch(r"try ([0-9]{1,2})", text) if isinstance(text, str) else None
    if text not in ("constant", "warn") and not (number and 2 <= int(number[1]) <= MOST_TRIED):
        raise InputError("unfamiliar", f'must be "constant", "warn", or "try N" with N from 2 to {MOST_TRIED}', repr(text))
    return f"try {int(number[1])}" if number else text
