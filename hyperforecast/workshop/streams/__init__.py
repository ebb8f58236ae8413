"""Task streams from synthetic families, open data and files of one's own.

Read in this order: stream (what a stream is), treatments, dealing, synthetic,
glyphs, open_data, definitions (streams in TOML), strange.
"""

from hyperforecast.workshop.streams.definitions import StreamDefinition, load_streams
from hyperforecast.workshop.streams.open_data import LOCKED, OPEN_SETS, load_open
from hyperforecast.workshop.streams.strange import KINDS, StrangeStream, make_strange
from hyperforecast.workshop.streams.stream import Collection, Stream
from hyperforecast.workshop.streams.synthetic import FAMILIES, draw_synthetic

__all__ = ["FAMILIES", "KINDS", "LOCKED", "OPEN_SETS", "Collection", "StrangeStream", "Stream", "StreamDefinition",
           "draw_synthetic", "load_open", "load_streams", "make_strange"]
