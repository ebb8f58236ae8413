"""What the user prefers: old classes or new ones, now or later, how much accuracy an exemplar must bring."""

from dataclasses import asdict, dataclass

from hyperforecast.checks import InputError, check_keys, check_number


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
    """

    old_weight: float | None = None
    now_weight: float = 1 / 3
    tolerance: float = 0.005

    def checked(self):
        """Return these preferences, with Python's own numbers, if they are valid, else raise `InputError`."""
        return Preferences(
            old_weight=None if self.old_weight is None else check_number("old_weight", self.old_weight, low=0, high=1),
            now_weight=check_number("now_weight", self.now_weight, low=0, high=1),
            tolerance=check_number("tolerance", self.tolerance, low=0, high=1))

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
