"""The slower search of settings at a boundary: space-filling design, TPE, warm starts, and what an attempt scores."""

from hyperforecast.workshop.searching.boundary_search import BoundarySearch, Outcome, class_codes
from hyperforecast.workshop.searching.designs import space_filling, uniform_draws
from hyperforecast.workshop.searching.increment_search import IncrementSearch, prepare_search
from hyperforecast.workshop.searching.search import STARTUP, STRATEGIES, SearchResult, run_search
from hyperforecast.workshop.searching.warm_starts import (
    WarmStart,
    read_warm_starts,
    warm_starts_of,
    write_warm_starts,
)

__all__ = [
    "BoundarySearch",
    "IncrementSearch",
    "Outcome",
    "STARTUP",
    "STRATEGIES",
    "SearchResult",
    "WarmStart",
    "class_codes",
    "prepare_search",
    "read_warm_starts",
    "run_search",
    "space_filling",
    "uniform_draws",
    "warm_starts_of",
    "write_warm_starts",
]
