"""The demo's invented scenario: the sorting cell of a salvage yard for fasteners and fittings.

Every delivery brings three part families that the cell has never seen. A chute lines the parts up, give or
take; a camera looks down on the belt; the lamp ages from delivery to delivery, so that the same parts look
dimmer, flatter and noisier later on. The pictures are drawn, not measured: they train nothing, and no
records are gathered on them.

Read from the bottom: `salvage_yard_stream` deals the parts, `part_features` is what the cell computes,
`draw_parts` poses, wears and lights the shapes that the small functions at the top define.
"""

import io
from pathlib import Path

import numpy as np

from hyperforecast.checks import InputError, check_choice, check_number, check_whole
from hyperforecast.storage import write_atomically
from hyperforecast.workshop.streams.stream import Collection, Stream, generator

SIDE = 32
DELIVERIES = (
    ("hex nut", "washer", "hex bolt"),
    ("wing nut", "cotter pin", "T-fitting"),
    ("eye bolt", "split washer", "hose clamp"),
    ("carriage bolt", "spring", "elbow fitting"),
    ("rivet", "hook", "bushing"),
    ("wedge anchor", "U-bolt", "wood screw"),
)
FAMILIES = tuple(family for delivery in DELIVERIES for family in delivery)
PARTS_PER_FAMILY = 250
OLDEST_LAMP = 0.3
N_ORIENTATIONS = 8
N_CELLS = 3

_FINE = 2 * SIDE  # points per side at which shapes are sampled before they are averaged to pixels
_CHUNK = 128


# Distances: negative inside a shape, in units of a part's half length; x runs right, y down.

def _box(x, y, left, right, top, bottom):
    return np.maximum.reduce([left - x, x - right, top - y, y - bottom])


def _disc(x, y, radius, cx=0.0, cy=0.0):
    return np.hypot(x - cx, y - cy) - radius


def _ring(x, y, radius, half_width, cx=0.0, cy=0.0):
    return abs(np.hypot(x - cx, y - cy) - radius) - half_width


def _rod(x, y, start, end, radius):
    along = (end[0] - start[0], end[1] - start[1])
    share = ((x - start[0]) * along[0] + (y - start[1]) * along[1]) / (along[0] ** 2 + along[1] ** 2)
    share = np.clip(share, 0.0, 1.0)
    return np.hypot(x - start[0] - share * along[0], y - start[1] - share * along[1]) - radius


def _hexagon(x, y, radius):
    half, root = 0.5, np.float32(np.sqrt(0.75))
    return np.maximum.reduce([abs(y), abs(half * y + root * x), abs(half * y - root * x)]) - radius


def _either(*distances):
    return np.minimum.reduce(distances)


def _without(distance, hole):
    return np.maximum(distance, -hole)


def _paint(tone, distance, value):
    return np.where(distance < 0, value, tone)


def _round(offset, radius):
    """Tone across a rod that is round."""
    return 0.55 + 0.45 * np.sqrt(np.clip(1.0 - (offset / radius) ** 2, 0.0, 1.0))


def _thread(y, pitch):
    """Tone along a thread: dark grooves."""
    return 0.72 + 0.28 * np.sin(2 * np.pi * y / pitch)


# Part families. Each takes coordinates of shape (n, side, side) and `vary(low, high)`, which draws one number
# per picture; it returns the distance to the part's outline and the tone of its surface.

def _hex_nut(x, y, vary):
    outline = _hexagon(x, y, 0.76)
    bore = vary(0.36, 0.48)
    tone = _paint(0.62, _disc(x, y, 0.8), 1.0)
    tone = _paint(tone, _disc(x, y, bore + 0.09), 0.7)
    return _without(outline, _disc(x, y, bore)), tone


def _washer(x, y, vary):
    bore = vary(0.34, 0.5)
    return _without(_disc(x, y, vary(0.76, 0.86)), _disc(x, y, bore)), 1.0


def _split_washer(x, y, vary):
    ring = _ring(x, y, vary(0.62, 0.68), 0.15)
    slant = vary(0.3, 0.6)
    gap = np.maximum(abs(x - 0.02 + slant * (y + 0.65)) - vary(0.07, 0.11), y)
    # The raised end throws its own shade along the gap.
    tone = np.clip(1.0 - 0.5 * np.exp(-8 * np.maximum(x, 0)) * (y < 0) * (x > 0), 0.5, 1.0)
    return _without(ring, gap), tone


def _bolt_shank(x, y, vary, top):
    half, tip, thread_from = vary(0.16, 0.21), vary(0.82, 0.95), vary(-0.1, 0.15)
    shank = _box(x, y, -half, half, top, tip)
    threaded = y > thread_from
    shank = shank + np.where(threaded, 0.025 * np.sin(2 * np.pi * y / 0.2), 0.0)
    return shank, _round(x, 1.15 * half) * np.where(threaded, _thread(y, 0.2), 1.0)


def _hex_bolt(x, y, vary):
    shank, tone = _bolt_shank(x, y, vary, -0.6)
    head = _box(x, y, -0.48, 0.48, -0.92, vary(-0.6, -0.52))
    facets = np.where(abs(x) < 0.24, 1.0, 0.62)
    return _either(shank, head), _paint(tone, head, facets)


def _carriage_bolt(x, y, vary):
    shank, tone = _bolt_shank(x, y, vary, -0.6)
    low = vary(-0.66, -0.58)
    dome = np.maximum(_disc(x, 0.75 * (y - low), 0.5), y - low)
    dome = np.maximum(dome, -0.97 - y)
    neck = _box(x, y, -0.24, 0.24, low, low + 0.22)
    tone = _paint(tone, neck, 0.8)
    return _either(shank, dome, neck), _paint(tone, dome, 1.05 - 0.45 * (x + 0.25) ** 2 / 0.3)


def _wing_nut(x, y, vary):
    hub = _disc(x, y, 0.4, 0.0, 0.26)
    lift, reach = vary(-0.42, -0.24), vary(0.6, 0.68)
    arm = _rod(abs(x), y, (0.16, 0.18), (reach, lift), 0.24)
    ear = _disc(abs(x), y, 0.3, reach, lift)
    tone = _paint(0.8, _disc(x, y, 0.36, 0.0, 0.26), 1.0)
    return _without(_either(hub, arm, ear), _disc(x, y, 0.22, 0.0, 0.26)), tone


def _cotter_pin(x, y, vary):
    eye = _ring(x, y, 0.25, 0.085, 0.0, -0.62)
    spread, short = vary(0.02, 0.16), vary(0.55, 0.75)
    left = _rod(x, y, (-0.11, -0.42), (-0.11 - spread, 0.93), 0.085)
    right = _rod(x, y, (0.11, -0.42), (0.11 + spread, short), 0.085)
    return _either(eye, left, right), 1.0


def _t_fitting(x, y, vary):
    half = vary(0.23, 0.28)
    y = y + 0.25
    across = _box(x, y, -0.85, 0.85, -half, half)
    down = _box(x, y, -half, half, 0.0, 0.95)
    collars = _either(_box(abs(x), y, 0.62, 0.9, -half - 0.12, half + 0.12),
                      _box(x, y, -half - 0.12, half + 0.12, 0.74, 1.02))
    tone = np.where(across < down, _round(y, 1.2 * half), _round(x, 1.2 * half))
    tone = _paint(tone, collars, np.where(abs(x) > y, _round(y, 1.2 * half + 0.14), _round(x, 1.2 * half + 0.14)))
    seams = _either(abs(abs(x) - 0.62), np.where(abs(x) < 0.5, abs(y - 0.74), 1.0)) - 0.03
    return _either(across, down, collars), _paint(tone, seams, 0.45)


def _elbow_fitting(x, y, vary):
    half, bend = vary(0.24, 0.29), 0.62
    x, y = x + 0.55, y - 0.55
    # A quarter of a ring joins the legs that leave upwards and to the right.
    corner = np.maximum.reduce([_ring(x - bend, y + bend, bend, half), x - bend, -(y + bend)])
    up = _box(x, y, -half, half, -1.2, -bend)
    right = _box(x, y, bend, 1.2, -half, half)
    collars = _either(_box(x, y, -half - 0.12, half + 0.12, -1.32, -1.02),
                      _box(x, y, 1.02, 1.32, -half - 0.12, half + 0.12))
    offset = np.where(y < -bend, x, np.where(x > bend, y, np.hypot(x - bend, y + bend) - bend))
    tone = _round(offset, 1.2 * half)
    tone = _paint(tone, collars, _round(offset, 1.2 * half + 0.14))
    seams = _either(np.where(x < 0.5, abs(y + 1.02), 1.0), np.where(y > -0.5, abs(x - 1.02), 1.0)) - 0.03
    return _either(corner, up, right, collars), _paint(tone, seams, 0.45)


def _eye_bolt(x, y, vary):
    radius = vary(0.28, 0.34)
    eye = _ring(x, y, radius, 0.12, 0.0, -0.5)
    half = vary(0.12, 0.15)
    shank = _box(x, y, -half, half, -0.5 + radius, 0.95) + np.where(y > 0.25, 0.025 * np.sin(2 * np.pi * y / 0.2), 0.0)
    tone = np.where(y > 0.25, _thread(y, 0.2), 1.0)
    return _either(eye, shank), tone * np.where(y > -0.5 + radius, _round(x, 1.15 * half), 1.0)


def _hose_clamp(x, y, vary):
    radius = vary(0.6, 0.68)
    band = _ring(x, y, radius, 0.075, 0.0, 0.2)
    length = vary(0.3, 0.38)
    housing = _box(x, y, -length, length, -0.78, -0.42)
    screw = _box(x, y, length, length + 0.28, -0.74, -0.46)
    tone = _paint(0.85, housing, np.where(np.sin(2 * np.pi * x / 0.2) > 0.2, 0.6, 1.0))
    return _either(band, housing, screw), _paint(tone, screw, 0.95)


def _spring(x, y, vary):
    half, turns = vary(0.34, 0.42), 5
    slope = turns / 1.7
    # A coil seen from the side is a zigzag of slanted front wires; back wires show dark between them.
    phase = (y + 0.85) * slope
    front = abs((phase - 0.5 * x / half) - np.round(phase - 0.5 * x / half)) / slope - 0.07
    back = abs((phase + 0.5 * x / half + 0.5) - np.round(phase + 0.5 * x / half + 0.5)) / slope - 0.045
    frame = _box(x, y, -half - 0.04, half + 0.04, -0.92, 0.92)
    coil = np.maximum(_either(front, back), frame)
    return coil, _paint(0.5, front, _round(x, 1.3 * half))


def _rivet(x, y, vary):
    low = vary(-0.3, -0.2)
    dome = np.maximum(np.maximum(_disc(x, 0.95 * (y - low), 0.6), y - low), -0.8 - y)
    half = vary(0.26, 0.31)
    shank = _box(x, y, -half, half, low, vary(0.55, 0.75))
    tone = _round(x, 1.15 * half)
    return _either(dome, shank), _paint(tone, dome, 1.05 - 0.4 * (x + 0.3) ** 2 / 0.5)


def _hook(x, y, vary):
    thick = vary(0.1, 0.13)
    eye = _ring(x, y, 0.2, 0.085, 0.0, -0.72)
    shank = _rod(x, y, (0.0, -0.5), (0.0, 0.0), thick)
    radius = vary(0.36, 0.42)
    # The bow runs from the shank round the bottom, open to the upper left.
    bow = _ring(x, y, radius, thick, 0.0, radius)
    mouth = np.maximum(x, y - radius - 0.02)
    tip = _disc(x, y, thick, -radius, radius)
    return _either(eye, shank, _without(bow, mouth), tip), 1.0


def _bushing(x, y, vary):
    # A short tube seen from above its rim: the rim is an ellipse with a dark bore.
    half, flat, length = vary(0.5, 0.6), 0.45, vary(0.55, 0.75)
    top = -0.42
    rim = _disc(x, (y - top) / flat, half) * 0.7
    foot = _disc(x, (y - top - length) / flat, half) * 0.7
    wall = _box(x, y, -half, half, top, top + length)
    bore = _disc(x, (y - top) / flat, half * vary(0.55, 0.68)) * 0.7
    tone = _paint(0.85 * _round(x + 0.12, 1.2 * half), rim, 1.05)
    return _either(rim, foot, wall), _paint(tone, bore, 0.2)


def _wedge_anchor(x, y, vary):
    half = vary(0.13, 0.16)
    stud = _box(x, y, -half, half, -0.95, 0.6) + np.where(y < -0.1, 0.025 * np.sin(2 * np.pi * y / 0.2), 0.0)
    at = vary(-0.62, -0.5)
    nut = _box(x, y, -0.33, 0.33, at, at + 0.22)
    plate = _box(x, y, -0.46, 0.46, at + 0.22, at + 0.32)
    clip = _box(x, y, -half - 0.07, half + 0.07, 0.25, 0.58)
    # The cone at the foot widens to spread the clip in its hole.
    cone = np.maximum(abs(x) - (half + 0.1) * np.clip((y - 0.45) / 0.4, 0, 1) - 0.02, abs(y - 0.73) - 0.22)
    tone = _round(x, 1.2 * half) * np.where(y < -0.1, _thread(y, 0.2), 1.0)
    tone = _paint(tone, clip, np.where(abs(x) < 0.05, 0.4, 0.75))
    tone = _paint(tone, np.maximum(abs(y - 0.6), abs(x) - 0.3) - 0.035, 0.45)
    tone = _paint(tone, nut, np.where(abs(x) < 0.16, 1.0, 0.62))
    return _either(stud, nut, plate, clip, cone), _paint(tone, plate, 0.85)


def _u_bolt(x, y, vary):
    radius, half = vary(0.44, 0.52), vary(0.1, 0.13)
    bow = np.maximum(_ring(x, y, radius, half, 0.0, -0.25), y + 0.25)
    legs = _box(abs(x), y, radius - half, radius + half, -0.26, 0.85)
    legs = legs + np.where(y > 0.2, 0.025 * np.sin(2 * np.pi * y / 0.2), 0.0)
    tone = np.where(y > 0.2, _thread(y, 0.2), 1.0)
    return _either(bow, legs), tone


def _wood_screw(x, y, vary):
    half = vary(0.17, 0.22)
    head = np.maximum(abs(x) - (0.46 + (half - 0.46) * np.clip((y + 0.9) / 0.36, 0, 1)), abs(y + 0.72) - 0.18)
    taper = half * np.clip((1.0 - y) / 1.1, 0.0, 1.0)
    ridges = np.where(y > -0.25, 0.05 * np.sin(2 * np.pi * (y - 0.3 * x) / 0.24), 0.0)
    shank = np.maximum(abs(x) - taper - ridges, abs(y - 0.2) - 0.76)
    tone = _round(x, half + 0.1) * np.where(y > -0.25, _thread(y - 0.3 * x, 0.24), 1.0)
    return _either(head, shank), _paint(tone, head, 0.9 - 0.4 * x)


_SHAPES = {
    "hex nut": _hex_nut, "washer": _washer, "hex bolt": _hex_bolt, "wing nut": _wing_nut, "cotter pin": _cotter_pin,
    "T-fitting": _t_fitting, "eye bolt": _eye_bolt, "split washer": _split_washer, "hose clamp": _hose_clamp,
    "carriage bolt": _carriage_bolt, "spring": _spring, "elbow fitting": _elbow_fitting, "rivet": _rivet,
    "hook": _hook, "bushing": _bushing, "wedge anchor": _wedge_anchor, "U-bolt": _u_bolt, "wood screw": _wood_screw,
}


def draw_parts(family, n, *, lamp_age, seed, wear=1.0):
    """Draw n grey pictures of one part family on the belt.

    The same seed gives the same parts in the same poses at every lamp age and wear.

    Parameters
    ----------
    family : str
        One of `FAMILIES`.
    n : int
    lamp_age : float in [0, 1]
        0 is a new lamp, 1 one that is due for replacement: dimmer, warmer, dying from one end, and seen through
        a dusty glass by a camera that has to amplify.
    seed : int, 0 or more
    wear : float in [0, 1]
        The most wear that a part may show: 0 is factory new; 1 allows gnawed edges, rust and bits broken off.

    Returns
    -------
    ndarray of shape (n, 32, 32), float32
        Grey levels in [0, 1].
    """
    check_number("lamp_age", lamp_age, low=0.0, high=1.0)
    return _light(_lay_parts(family, n, seed, wear), lamp_age, generator(seed, "light", family))


def _lay_parts(family, n, seed, wear=1.0):
    """Return what n parts and the belt reflect of cold and of warm light, shape (n, 2, side, side)."""
    check_choice("family", family, FAMILIES)
    check_whole("n", n, low=1)
    check_number("wear", wear, low=0.0, high=1.0)
    rng = generator(check_whole("seed", seed), "parts", family)
    return np.concatenate([
        _lay_chunk(_SHAPES[family], min(_CHUNK, n - start), wear, rng) for start in range(0, n, _CHUNK)
    ])


def _lay_chunk(shape, n, wear, rng):
    def vary(low, high):
        return rng.uniform(low, high, (n, 1, 1)).astype(np.float32)

    axis = (np.arange(_FINE, dtype=np.float32) + 0.5) * (2 / _FINE) - 1
    turn, size = vary(-0.5, 0.5), vary(0.72, 0.9)
    right, down = axis[None, None, :] - vary(-0.12, 0.12), axis[None, :, None] - vary(-0.12, 0.12)
    x = (np.cos(turn) * right + np.sin(turn) * down) / size
    y = (np.cos(turn) * down - np.sin(turn) * right) / size
    distance, tone = (np.asarray(values, dtype=np.float32) for values in shape(x, y, vary))

    worn = np.float32(wear) * rng.beta(1.2, 2.0, (n, 1, 1)).astype(np.float32)
    distance = distance + worn * (0.1 * _clouds(rng, n, 12) - 0.02)
    distance = _without(distance, _bite(x, y, distance, worn, rng))
    coverage = np.clip(0.5 - distance * size * (_FINE / 4), 0.0, 1.0)
    rust = np.clip(3 * (_clouds(rng, n, 16) + _clouds(rng, n, 6) - 1.35 + 0.9 * worn), 0.0, 1.0) * (worn > 0)

    # Bevelled edges catch the light that falls from the upper left; the shadow lies to the lower right.
    height = np.clip(-distance / 0.09, 0.0, 1.0)
    slope = np.gradient(height, axis=1) + np.gradient(height, axis=2)
    metal = vary(0.62, 0.86) * tone * (1 + 0.55 * slope)
    shadow = np.clip(0.5 - 4 * np.roll(distance, (3, 3), (1, 2)), 0.0, 1.0)
    belt = (vary(0.16, 0.26) + 0.04 * _clouds(rng, n, 20)) * (1 - 0.4 * shadow)

    # Rust is brown: dark in cold light, much less so in warm light.
    layers = [belt + coverage * (metal * (1 - darkness * rust) - belt) for darkness in (0.62, 0.32)]
    return np.stack(layers, axis=1).reshape(n, 2, SIDE, 2, SIDE, 2).mean((3, 5))


def _clouds(rng, n, cells):
    """Return n smooth random fields of mean 0, about within [-1, 1], from bilinear grids of cells x cells."""
    grid = rng.uniform(-1.0, 1.0, (n, cells, cells)).astype(np.float32)
    at = np.linspace(0, cells - 1, _FINE, dtype=np.float32)
    weights = np.clip(1.0 - abs(at[:, None] - np.arange(cells, dtype=np.float32)), 0.0, 1.0)
    return weights @ grid @ weights.T


def _bite(x, y, distance, worn, rng):
    """Return the distance to a disc on each part's outline: the bit that broke off, larger on worn parts."""
    n = len(x)
    spots = rng.integers(0, _FINE**2, (n, 24))
    nearest = abs(np.take_along_axis(distance.reshape(n, -1), spots, 1)).argmin(1)
    spot = np.take_along_axis(spots, nearest[:, None], 1)
    cx, cy = (np.take_along_axis(axis.reshape(n, -1), spot, 1)[:, :, None] for axis in (x, y))
    return _disc(x, y, 0.3 * np.maximum(worn - 0.35, 0.0), cx, cy) + 1e-3


def _light(reflected, lamp_age, rng):
    """Return what the camera sees, (n, side, side) in [0, 1], of parts that `_lay_parts` laid."""
    scene = (1 - lamp_age) * reflected[:, 0] + lamp_age * reflected[:, 1]
    across = np.linspace(-1, 1, SIDE, dtype=np.float32)
    flicker = rng.normal(1.0, 0.04, (len(scene), 1, 1)).astype(np.float32)
    gain = flicker * (1 - 0.5 * lamp_age) * (1 - (0.05 + 0.4 * lamp_age) * across)
    noise = rng.standard_normal(scene.shape, dtype=np.float32)
    return np.clip(gain * scene + 0.1 * lamp_age + (0.015 + 0.03 * lamp_age) * noise, 0.0, 1.0)


def part_features(images):
    """Return the features that the cell computes: how bright each region is, and how its edges run.

    Nothing is fitted, and nothing corrects for the lamp: edges count with their contrast.

    Parameters
    ----------
    images : ndarray of shape (n, 32, 32)
        Grey levels in [0, 1].

    Returns
    -------
    ndarray of shape (n, 90), float32
        Ten maps of 3 x 3 overlapping regions: the gradient's magnitude in 8 orientations, the grey level's
        mean, and its standard deviation.
    """
    images = np.asarray(images, dtype=np.float32)
    across, down = np.zeros_like(images), np.zeros_like(images)
    across[:, :, 1:-1] = images[:, :, 2:] - images[:, :, :-2]
    down[:, 1:-1] = images[:, 2:] - images[:, :-2]
    magnitude = np.hypot(across, down)
    sector = np.arctan2(down, across) * (N_ORIENTATIONS / (2 * np.pi))
    layers = []
    for orientation in range(N_ORIENTATIONS):
        # An edge between two orientations counts for both, in proportion.
        apart = abs((sector - orientation + N_ORIENTATIONS / 2) % N_ORIENTATIONS - N_ORIENTATIONS / 2)
        layers.append(_pool(magnitude * np.maximum(1.0 - apart, 0.0)))
    mean = _pool(images)
    deviation = np.sqrt(np.maximum(_pool(images**2) - mean**2, 0.0))
    return np.concatenate([*layers, mean, deviation], axis=1).astype(np.float32)


def _pool(layer):
    """Return weighted means (n, 9) of layers (n, side, side) over 3 x 3 overlapping regions."""
    at = (np.arange(SIDE, dtype=np.float32) + 0.5) / SIDE * (N_CELLS - 1)
    weights = np.clip(1.0 - abs(at - np.arange(N_CELLS, dtype=np.float32)[:, None]), 0.0, 1.0)
    weights /= weights.sum(1, keepdims=True)
    return (weights @ layer @ weights.T).reshape(len(layer), -1)


def lamp_age_at(t):
    """Return the age of the lamp when delivery t arrives: new at first, a good part of its life spent at the last."""
    return OLDEST_LAMP * t / (len(DELIVERIES) - 1)


def salvage_yard_stream(seed):
    """Return the whole scenario as a `Stream`: six deliveries of three families, features of `part_features`.

    Held-out parts, too, are seen under the lamp of the boundary at which they are asked for.

    Parameters
    ----------
    seed : int, 0 or more
        Of the parts, the light and the split.
    """
    reflected = np.concatenate([_lay_parts(family, PARTS_PER_FAMILY, seed) for family in FAMILIES])
    parts = Collection(reflected.reshape(len(reflected), -1), np.repeat(FAMILIES, PARTS_PER_FAMILY))

    def camera(X, t, rng):
        return part_features(_light(X.reshape(-1, 2, SIDE, SIDE), lamp_age_at(t), rng))

    return Stream(parts, DELIVERIES, name="salvage yard", source="salvage yard", seed=seed, sensor=camera)


def write_deliveries(folder, *, seed):
    """Write the scenario as files, for the commands of a device; return their paths.

    delivery1.npz to delivery6.npz hold what arrives, inspected1.npz to inspected6.npz parts of all families so far that
    were sorted by hand, seen under the lamp of that day, which no delivery brings. Each holds X (n, 90) and y (n,).

    Parameters
    ----------
    folder : str or Path
        Made if it does not exist.
    seed : int, 0 or more
        As of `salvage_yard_stream`.

    Raises
    ------
    InputError
        If a file cannot be written.
    """
    folder, stream, paths = Path(folder), salvage_yard_stream(seed), []
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise InputError(folder, "must be a folder, or the name of a new one", error.strerror) from None
    for t in range(stream.n_boundaries):
        for name, increment in (("delivery", stream.training(t)), ("inspected", stream.selection(t))):
            written = io.BytesIO()
            np.savez(written, X=increment.X, y=increment.y)
            paths.append(folder / f"{name}{t + 1}.npz")
            write_atomically(paths[-1], written.getvalue())
    return paths


def delivery_pictures(t, n, *, seed):
    """Return n pictures of each family in delivery t as they looked on arrival, for people to look at.

    Parameters
    ----------
    t : int from 0 to 5
    n : int from 1 to 250
    seed : int, 0 or more
        The stream's: the parts are its parts, some of them held out.

    Returns
    -------
    dict of str to ndarray of shape (n, 32, 32), float32
    """
    check_whole("t", t, high=len(DELIVERIES) - 1)
    check_whole("n", n, low=1, high=PARTS_PER_FAMILY)
    return {
        family: draw_parts(family, PARTS_PER_FAMILY, lamp_age=lamp_age_at(t), seed=seed)[:n] for family in DELIVERIES[t]
    }
