"""JSON documents that pass through a device's door: their published schemas, and the checks that they have in common.

`schemas/` holds a JSON Schema (draft 2020-12) of each, all but the list of descriptors, which `schema` fills in from
`hyperforecast.describing.DESCRIPTORS`, so that the two cannot drift apart. Checks are written by hand, since a device
has numpy alone; the tests hold them against the schemas.
"""

import math
from pathlib import Path

from hyperforecast.checks import InputError, check_keys, check_number
from hyperforecast.describing import DESCRIPTORS
from hyperforecast.storage import read_json

SCHEMAS = ("request", "advice", "history")
# Descriptors that count something, and the least that there must be of it.
SMALLEST = {"classes_old": 1, "classes_new": 0, "classes_returning": 0, "rows": 1, "features": 1, "hidden_units": 0,
            "passes": 1, "batch_size": 1, "boundary_number": 1}


def schema(name):
    """Return the JSON Schema of a kind of document as a dict; `name` is one of `SCHEMAS`."""
    document = read_json(Path(__file__).parent / "schemas" / f"{name}.schema.json")
    document["$defs"]["descriptors"].update(
        properties={one.name: _property(one) for one in DESCRIPTORS.values()}, additionalProperties=False)
    return document


def _property(descriptor):
    least = {"minimum": SMALLEST[descriptor.name]} if descriptor.name in SMALLEST else {}
    return {"description": descriptor.explanation, "type": ["number", "null"], **least}


def check_object(name, value, required, optional=()):
    """Return `value` if it is a JSON object with these keys, or raise `InputError`; `name` is what errors call it."""
    if not isinstance(value, dict):
        raise InputError(name, "must be a JSON object", type(value).__name__)
    check_keys(name, value, (*required, *optional))
    for key in required:
        if key not in value:
            raise InputError(name, f"must hold {', '.join(required)}", f"no {key}")
    return value


def check_descriptors(name, value):
    """Return descriptors of a document as floats by name, NaN for null, or raise `InputError`. Any may be missing."""
    if not isinstance(value, dict):
        raise InputError(name, "must be a JSON object of descriptors by name", type(value).__name__)
    for key in value:
        if key not in DESCRIPTORS:
            raise InputError(name, "must be descriptors that this version knows (advise --schema lists them)", repr(key),
                             "correct or remove it")
    return {key: math.nan if number is None else
            check_number(f"{name}, {key}", number, low=SMALLEST.get(key, -math.inf), remedy="give null if not known")
            for key, number in value.items()}
