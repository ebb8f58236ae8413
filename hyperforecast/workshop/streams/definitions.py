"""Stream definitions in TOML: one [[stream]] table for each kind of stream, one stream for each of its seeds.

Keys of a table: `name`; `source` (an open set or a synthetic family) or `file`
(rows of one's own, relative to the TOML file); `seeds` or `seed`; `increments`
(lists of labels, or how many, the seed then deals the classes); `classes`,
`recurring`, `largest_increment`, `rows_per_class`, `features`, `dimension`; for synthetic families
also `raw_dimension`, `separation`, `noise`.
"""

import hashlib
import tomllib
from dataclasses import asdict, dataclass, field
from functools import lru_cache
from pathlib import Path

from hyperforecast.checks import InputError, check_choice, check_keys, check_number, check_whole
from hyperforecast.increments import read_increment
from hyperforecast.storage import checksum, dump_json, read_bytes
from hyperforecast.workshop.streams.dealing import deal_classes, most_classes
from hyperforecast.workshop.streams.open_data import OPEN_SETS, load_open
from hyperforecast.workshop.streams.stream import (
    CONTEST_ROWS_PER_CLASS,
    Collection,
    Stream,
    check_labels_of_increments,
    generator,
)
from hyperforecast.workshop.streams.synthetic import FAMILIES, draw_synthetic
from hyperforecast.workshop.streams.treatments import TREATMENTS

LARGEST_DEFINITIONS = 4 * 2**20
HIGHEST_SEED = 2**32 - 1
MOST_INCREMENTS = 1000

_SYNTHETIC_KEYS = ("raw_dimension", "separation", "noise")
_KEYS = ("name", "source", "file", "seeds", "seed", "increments", "classes", "recurring", "largest_increment",
         "rows_per_class", "features", "dimension", *_SYNTHETIC_KEYS)


@dataclass(frozen=True)
class StreamDefinition:
    """All that makes one stream, cheap to hold; `build` makes it.

    Attributes
    ----------
    name : str
        Name of the table.
    origin : str
        Open set, synthetic family, or the name of a file.
    source : str
        Unit of leaving one source out.
    seed : int
    increments : tuple of tuples of labels, or int
        Labels of each increment, or the number of increments; None: the seed draws it (synthetic).
    classes, rows_per_class, dimension, raw_dimension, largest_increment : int or None
    recurring, separation, noise : float or None
    features : str
        See `Stream` and `draw_synthetic`; None: all classes, 100 rows, or drawn (synthetic).
    content : str
        SHA-256 of the user's file; empty for other sources.
    """

    name: str
    origin: str
    source: str
    seed: int
    increments: tuple | int | None = None
    classes: int | None = None
    recurring: float | None = None
    rows_per_class: int | None = None
    features: str = "raw"
    dimension: int | None = None
    raw_dimension: int | None = None
    separation: float | None = None
    noise: float | None = None
    content: str = ""
    largest_increment: int | None = None
    _file: str = field(default="", compare=False, repr=False)
    _where: str = field(default="stream", compare=False, repr=False)

    @property
    def key(self):
        """Text that names this stream and its seed: it changes when the definition does, not with its place on disk."""
        return f"{self.name}/{self.seed}/{checksum(dump_json(self.as_dict()))[:12]}"

    def as_dict(self):
        """Return the definition as a JSON-able dict, without what is left to the seed."""
        return {name: value for name, value in asdict(self).items()
                if value not in (None, "") and not name.startswith("_")}

    def build(self):
        """Return the `Stream`.

        Raises
        ------
        InputError
            If the source is not installed or the definition does not fit its rows; names file and stream.
        """
        try:
            return self._build()
        except InputError as error:
            raise InputError(f"{self._where} {error.parameter}", error.rule, error.received, error.remedy) from None

    def _build(self):
        if self.origin in FAMILIES:
            draw = draw_synthetic(
                self.origin, self.seed, increments=self.increments, classes=self.classes,
                raw_dimension=self.raw_dimension, rows_per_class=self.rows_per_class, separation=self.separation,
                noise=self.noise, recurring=self.recurring, largest_increment=self.largest_increment)
            collection, increments, rows_per_class = draw.collection, draw.increments, draw.rows_per_class
            sensor = draw.sensor
        else:
            collection = _load_file(self._file, self.content) if self._file else load_open(self.origin)
            increments = self._deal(collection) if isinstance(self.increments, int) else self.increments
            rows_per_class = self.rows_per_class or CONTEST_ROWS_PER_CLASS
            sensor = None
        return Stream(collection, increments, name=self.name, source=self.source, seed=self.seed,
                      rows_per_class=rows_per_class, features=self.features, dimension=self.dimension, sensor=sensor)

    def _deal(self, collection):
        labels = sorted(set(collection.y.tolist()))
        rng = generator(self.seed, "classes", self.name)
        if self.classes is not None:
            if self.classes > len(labels):
                raise InputError("classes", f"must be at most the {len(labels)} of the source", self.classes)
            labels = [labels[at] for at in rng.permutation(len(labels))[:self.classes]]
        return deal_classes(labels, self.increments, rng, recurring=self.recurring or 0.0,
                            largest=self.largest_increment)


@lru_cache(maxsize=1)
def _load_file(path, content):
    """Return the collection in a user's file; `content` is part of the cache's key."""
    increment = read_increment(path)
    return Collection(increment.X, increment.y)


def load_streams(path):
    """Return the list of `StreamDefinition` of a TOML file, in its order, seeds within tables.

    Raises
    ------
    InputError
        Naming file, stream, key and value, if the file cannot be read or breaks a rule.
    """
    path = Path(path)
    data = read_bytes(path, largest=LARGEST_DEFINITIONS)
    try:
        document = tomllib.loads(data.decode("utf-8"))
    except (ValueError, RecursionError) as error:
        raise InputError(path, "must be a TOML file", error) from None
    check_keys(path, document, ("stream",))
    tables = document.get("stream")
    if not isinstance(tables, list) or not tables or not all(isinstance(table, dict) for table in tables):
        raise InputError(path, "must hold [[stream]] tables", "none" if tables is None else repr(tables))
    definitions, names = [], set()
    for number, table in enumerate(tables, 1):
        name = table.get("name")
        where = f"{path} stream {number}" if not isinstance(name, str) else f"{path} stream {name!r}"
        try:
            definitions += _read_table(table, path, where)
        except InputError as error:
            raise InputError(f"{where} {error.parameter}", error.rule, error.received, error.remedy) from None
        if name in names:
            raise InputError(f"{where} name", "must differ from the other streams' names", repr(name))
        names.add(name)
    return definitions


def _read_table(table, path, where):
    check_keys("keys", table, _KEYS)
    name = table.get("name")
    if not isinstance(name, str) or not name.strip():
        raise InputError("name", "must be a text", repr(name))
    if ("source" in table) == ("file" in table):
        raise InputError("source", "must be given, or else file", "both" if "source" in table else "neither")
    facts = {"name": name, "features": check_choice("features", table.get("features", "raw"), TREATMENTS),
             "_where": where}
    if "file" in table:
        facts.update(_find_file(table["file"], path))
    else:
        origin = check_choice("source", table["source"], (*FAMILIES, *OPEN_SETS))
        facts.update(origin=origin, source=OPEN_SETS[origin].source if origin in OPEN_SETS else origin)
    synthetic = facts["origin"] in FAMILIES
    for key, low, high in (("classes", 3, None), ("largest_increment", 1, None),
                           ("rows_per_class", 1, 150 if synthetic else None),
                           ("dimension", 1, 65_536), ("raw_dimension", 2, 65_536)):
        if key in table:
            facts[key] = check_whole(key, table[key], low=low, high=high)
    for key, high in (("recurring", 1.0), ("separation", 1e6), ("noise", 1e6)):
        if key in table:
            facts[key] = check_number(key, table[key], low=0.0, high=high)
    if not synthetic:
        for key in _SYNTHETIC_KEYS:
            if key in facts:
                raise InputError(key, "must be left out: only synthetic families take it", table[key], "remove it")
    if (facts["features"] == "raw") == ("dimension" in facts):
        raise InputError("dimension", "must be given with pca, fourier or convolution, and only then",
                         table.get("dimension", "nothing"), "add or remove it, or set features")
    facts["increments"] = _check_increments(table, facts, synthetic)
    return [StreamDefinition(seed=seed, **facts) for seed in _check_seeds(table)]


def _find_file(given, path):
    if not isinstance(given, str) or not given:
        raise InputError("file", "must be a path, relative to the TOML file", repr(given))
    file = path.parent / given
    try:
        with open(file, "rb") as stream:
            content = hashlib.file_digest(stream, "sha256").hexdigest()
    except OSError as error:
        raise InputError("file", "must be a readable file, relative to the TOML file",
                         f"{given} ({error.strerror or error})") from None
    return {"origin": file.name, "source": f"file {file.name}", "content": content, "_file": str(file)}


def _check_increments(table, facts, synthetic):
    given = table.get("increments")
    if isinstance(given, list):
        if synthetic:
            raise InputError("increments", "must be a number: a synthetic family's classes are alike", given)
        for key in ("classes", "recurring", "largest_increment"):
            if key in facts:
                raise InputError(key, "must be left out where increments are listed", table[key], "remove it")
        for increment in given:
            if not isinstance(increment, list) or not all(
                    isinstance(label, (str, int)) and not isinstance(label, bool) for label in increment):
                raise InputError("increments", "must be lists of labels, texts or whole numbers", repr(increment))
        return check_labels_of_increments(given)
    if given is None and synthetic:
        return None
    number = check_whole("increments", given, low=2, high=MOST_INCREMENTS, remedy="give a number, or lists of labels")
    low, high = number + 1, most_classes(number, facts.get("largest_increment"))
    if "classes" in facts and not low <= facts["classes"] <= high:
        raise InputError("classes", f"must be from {low} to {high} with {number} increments", facts["classes"])
    return number


def _check_seeds(table):
    if "seed" in table and "seeds" in table:
        raise InputError("seed", "must be left out where seeds are given", table["seed"], "remove one of them")
    if "seed" in table:
        return [check_whole("seed", table["seed"], high=HIGHEST_SEED)]
    seeds = table.get("seeds", [0])
    if not isinstance(seeds, list) or not seeds:
        raise InputError("seeds", "must be a list of whole numbers", repr(seeds))
    seeds = [check_whole("seeds", seed, high=HIGHEST_SEED) for seed in seeds]
    if len(set(seeds)) < len(seeds):
        raise InputError("seeds", "must differ", seeds)
    return seeds
