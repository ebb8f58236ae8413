"""What an arriving increment makes doubtful, in words, before anything is learned of it."""

from hyperforecast.describing import similar_names, suspicious_labels

# Rows that are looked at before each advice and update; `hyperforecast check` looks at all.
QUICK_ROWS = 100
# One row may be doubted by chance.
FEWEST_DOUBTED = 2
MOST_NAMES = 5


def quick_doubts(increment, carryover, *, seed=0):
    """Return lines about an `Increment` that meets a `Carryover` (None: it is the first): doubts, no refusals.

    New names that look like others, and labels that look wrong among at most 100 rows drawn with `seed`.
    """
    known = [] if carryover is None else carryover.classes.tolist()
    lines = [f"class {new} is new and its name looks like that of class {other}"
             for other, new in similar_names(sorted(set(increment.y.tolist())), known)[:MOST_NAMES]]
    found = suspicious_labels(increment, carryover, most_rows=QUICK_ROWS, seed=seed)
    if len(found) >= FEWEST_DOUBTED:
        lines.append(f"{len(found)} of {found.looked_at} labels looked at seem wrong, first that of row "
                     f"{found.rows[0]}: class {found.given[0]}, more like class {found.likelier[0]}; the command check "
                     "looks at all")
    return lines
