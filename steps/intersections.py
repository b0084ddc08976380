"""Find where tracks on the Earth intersect.

Along the tracks, runs of sixteen segments are put into boxes, boxes of one track into larger ones, and these, in the
order of a space-filling curve (Morton 1966), into a tree; pairs of boxes that overlap are followed down the tree (as in
hierarchies of bounding volumes). Boxes are of unit vectors, so neither 180 degrees nor a pole is special. Segments of
overlapping runs are intersected in the gnomonic projection about one of their own ends. There a great circle of the
geodetic coordinates is straight, and the geodesic between two readings nearly so: the crossing of two geodesics of
length s is met within 1.6e-10 s^2 per metre, 1 cm at 5 km, 2 cm at 10 km, 0.4 m at 50 km.
"""

from dataclasses import dataclass, fields, replace

import numpy as np

from steps import geodesy
from steps.geodesy import A_M, E2

LEAF = 16  # segments in a leaf
FAN = 4  # children of a node
WITHIN_TRACK = 2  # levels above the leaves whose nodes stay within one run of joined readings
ROUNDING = 1e-6  # of unit vectors in single precision, radians; 6 m
TOUCH_M = 1e-6  # nearer than this is touching; coordinates in degrees are good to 3e-9 m
STILL_DEG = 1e-11  # and a smaller step is none
SAME_M = 2e-5  # where two segments all but parallel touch is known less well
LONGEST_COSINE = 0.98  # of the arc between readings that may be joined: 1270 km
PAIRS_AT_ONCE = 1 << 15
POINTS_AT_ONCE = 1 << 16


@dataclass(frozen=True)
class Crossings:
    """Intersections of tracks, in order of `i` and `j`; ``i < j``.

    Attributes
    ----------
    i, j : array of int, shape (m,)
        Readings before the intersection on the earlier and on the later pass.
    fraction_i, fraction_j : array of float, shape (m,)
        Place between that reading and the next, 0 to 1.
    lat, lon : array of float, shape (m,)
        Place, degrees; longitude in [-180, 180).
    angle_deg : array of float, shape (m,)
        Angle between the two tracks, 0 to 90 degrees.

    """

    i: np.ndarray
    fraction_i: np.ndarray
    j: np.ndarray
    fraction_j: np.ndarray
    lat: np.ndarray
    lon: np.ndarray
    angle_deg: np.ndarray

    def __len__(self) -> int:
        return len(self.i)

    def take(self, which: np.ndarray) -> "Crossings":
        """Return the crossings at an index or mask, as numpy does."""
        return Crossings(*(getattr(self, part.name)[which] for part in fields(self)))


def find_crossings(lat, lon, track, *, joined=None, shortest_loop_m: float = 0.0) -> Crossings:
    """Find every point where two tracks, or two passes of one track, intersect or touch.

    A crossing is a point that two segments share and that is no part of a stretch that they share: the same points as
    the isolated points of the intersection of two polylines. Each is given once, also where a track goes through a
    reading of the other or of itself; tracks that lie on each other (duplicates, parts run twice over the very same
    coordinates) have none along that stretch. Touching means nearer than a micrometre.

    Parameters
    ----------
    lat, lon : array of float, shape (n,)
        Geodetic latitude and longitude, degrees, in the order in which the tracks were run; any branch of longitude.
    track : array of int, shape (n,)
        Track of each reading. Readings of one track are consecutive.
    joined : array of bool, shape (n - 1,), optional
        Whether a segment joins a reading to the next; without it all of one track are joined. Readings of different
        tracks, of missing position, or more than 1000 km apart, are never joined.
    shortest_loop_m : float, optional
        A crossing of a track with itself is left out where the way along the track from one pass to the other, gaps
        included, is shorter than this.

    Returns
    -------
    Crossings

    """
    lat, lon, track = np.asarray(lat, float), np.asarray(lon, float), np.asarray(track)
    kept, following = _points(lat, lon, track, joined)
    if kept is not None:
        lat, lon, track = lat[kept], lon[kept], track[kept]
    if not following.any():
        return _nothing()
    leaf_start, leaf_end, levels = _tree(lat, lon, following)
    found, shared, way = [], [], _Way(lat, lon, track)
    for a, b in _overlapping(levels):
        first, second = _near_segments(lat, lon, leaf_start[a], leaf_end[a], leaf_start[b], leaf_end[b])
        one, same = _intersect(lat, lon, first, second)
        if shortest_loop_m > 0:
            one = one.take(way.between(one) >= shortest_loop_m)
        found.append(one)
        shared.append(same)
    result, shared = _join(found), np.concatenate(shared) if shared else np.zeros((0, 6))
    result = _once(_at_readings(result, following), shared)
    if kept is not None:
        result = replace(result, i=kept[result.i], j=kept[result.j])
    return result


class _Way:
    """Length of the way along a track, worked out for the tracks that cross themselves only."""

    def __init__(self, lat, lon, track):
        self.lat, self.lon = lat, lon
        self.starts = np.concatenate([[0], np.flatnonzero(np.diff(track)) + 1, [len(track)]])
        self.known = {}

    def between(self, c: Crossings) -> np.ndarray:
        """Return the metres from one pass to the other; infinite between different tracks."""
        way = np.full(len(c), np.inf)
        number = np.searchsorted(self.starts, c.i, side="right")
        own = np.flatnonzero(c.j < self.starts[number])
        for name in np.unique(number[own]):
            on = own[number[own] == name]
            first, end = self.starts[name - 1 : name + 1]
            if name not in self.known:
                vectors = geodesy.to_vectors(self.lat[first:end], self.lon[first:end])
                step = np.linalg.norm(np.diff(vectors, axis=1), axis=0)
                self.known[name] = np.concatenate([[0.0], np.cumsum(step)])
            far = self.known[name]
            early, late = (
                far[k - first] * (1 - share) + far[np.minimum(k - first + 1, len(far) - 1)] * share
                for k, share in ((c.i[on], c.fraction_i[on]), (c.j[on], c.fraction_j[on]))
            )
            way[on] = late - early
        return way


def _nothing() -> Crossings:
    whole, real = np.zeros(0, np.int64), np.zeros(0)
    return Crossings(whole, real, whole, real, real, real, real)


def _join(parts: list[Crossings]) -> Crossings:
    """Join parts in the order of their readings, whatever the order in which they were found."""
    if not parts:
        return _nothing()
    whole = Crossings(*(np.concatenate([getattr(part, f.name) for part in parts]) for f in fields(Crossings)))
    return whole.take(np.lexsort((whole.fraction_j, whole.fraction_i, whole.j, whole.i)))


def _points(lat, lon, track, joined):
    """Say which readings are ends of segments, and whether each is joined to the next of them.

    Of readings at one place without a segment between, the last stands for all. `kept` is None where all are kept.
    """
    link = np.diff(track) == 0
    if joined is not None:
        link &= np.asarray(joined, bool)
    good = np.isfinite(lat) & np.isfinite(lon)
    if not good.all():
        link &= good[1:] & good[:-1]
    still = (np.abs(np.diff(lat)) <= STILL_DEG) & (np.abs(np.diff(lon)) <= STILL_DEG) & link
    used = np.zeros(len(lat), bool)
    used[:-1] |= link
    used[1:] |= link
    used[:-1] &= ~still
    if used.all():
        return None, link
    kept = np.flatnonzero(used)
    # what follows a reading in its run is the next kept one, since only readings at the very same place are dropped
    following = link[kept[:-1]] if len(kept) else np.zeros(0, bool)
    return kept, following


# -- the tree --------------------------------------------------------------------------------------------------------


@dataclass
class _Level:
    """Nodes of one level: boxes, children in the level below, and what is known of the way along the track."""

    box: np.ndarray  # (6, m) lower x, y, z and negative upper x, y, z
    first: np.ndarray  # (m,) first child
    count: np.ndarray  # (m,) number of children
    order: np.ndarray | None  # (m,) place in the order along the tracks; None where nodes mix tracks
    run: np.ndarray | None  # (m,) run of joined readings
    sense: np.ndarray | None  # (m,) half-planes of directions in which the track only goes forward


def _tree(lat, lon, following):
    """Build the levels, leaves first, and the first and last point of every leaf."""
    starts = np.flatnonzero(following & ~np.concatenate([[False], following[:-1]]))
    ends = np.flatnonzero(following & ~np.concatenate([following[1:], [False]])) + 1  # last point of the run
    start, run = _groups(starts, ends, LEAF)
    end = np.minimum(start + LEAF, ends[run])
    box, sense = _leaf_boxes(lat, lon, following, start, end)
    levels = [_Level(box, start, end - start, np.arange(len(start)), run, sense)]
    for _ in range(WITHIN_TRACK):
        below = levels[-1]
        edges = np.flatnonzero(np.diff(below.run, prepend=-1))
        first, at = _groups(edges, np.append(edges[1:], len(below.run)), FAN)
        count = np.diff(np.append(first, len(below.run)))
        box = np.minimum.reduceat(below.box, first, axis=1)
        sense = np.bitwise_and.reduceat(below.sense, first)
        levels.append(_Level(box, first, count, np.arange(len(first)), at, sense))
    top = levels[-1]
    sort = np.argsort(_morton(top.box), kind="stable")
    levels[-1] = _Level(
        top.box[:, sort], *(part[sort] for part in (top.first, top.count, top.order, top.run, top.sense))
    )
    while levels[-1].box.shape[1] > FAN:
        size = levels[-1].box.shape[1]
        first = np.arange(0, size, FAN)
        box = np.minimum.reduceat(levels[-1].box, first, axis=1)
        levels.append(_Level(box, first, np.diff(np.append(first, size)), None, None, None))
    return start, end, levels


def _groups(starts, ends, size):
    """Cut runs [start, end) into groups of `size`; return the start of each group and its run."""
    number = -(-(ends - starts) // size)
    run = np.repeat(np.arange(len(starts)), number)
    place = np.arange(len(run)) - np.repeat(np.cumsum(number) - number, number)
    return starts[run] + place * size, run


def _leaf_boxes(lat, lon, following, start, end):
    """Bound the segments of each leaf; tell in which half-planes of directions its way lies."""
    m = len(start)
    box = np.empty((6, m), np.float32)
    sense = np.empty(m, np.uint8)
    stops = np.append(np.searchsorted(start, np.arange(start[0] + POINTS_AT_ONCE, end[-1], POINTS_AT_ONCE)), m)
    low = 0
    for high in stops:
        if high == low:
            continue
        begin, stop = start[low], end[high - 1] + 1
        at, last = start[low:high] - begin, end[low:high] - begin
        la, lo = lat[begin:stop], lon[begin:stop]
        la4, lo4 = np.radians(la).astype(np.float32), np.radians(lo).astype(np.float32)
        flat = np.cos(la4)
        for axis, part in enumerate((flat * np.cos(lo4), flat * np.sin(lo4), np.sin(la4))):
            box[axis, low:high] = np.minimum(np.minimum.reduceat(part, at), part[last])
            np.negative(part, out=part)
            box[3 + axis, low:high] = np.minimum(np.minimum.reduceat(part, at), part[last])
        sense[low:high] = _senses(la, lo, following[begin : stop - 1], at)
        low = high
    size2 = ((box[:3] + box[3:]) ** 2).sum(axis=0)
    box -= ROUNDING + size2 / 8  # the arc rises above its chord by an eighth of the square
    return box, sense


def _senses(lat, lon, following, at):
    """Tell, as eight bits, to which of eight half-planes of directions all segments of each leaf belong.

    A path all of whose steps lie in one half-plane cannot meet itself: this spares comparing straight tracks with
    themselves.
    """
    north, east = np.diff(lat), np.diff(lon)
    if east.size and (east.min() < -180 or east.max() > 180):
        east -= 360.0 * np.round(east / 360.0)
    bits = np.zeros(len(north), np.uint8)
    place = 1
    for part in (north, east, north + east, north - east):
        for side in (part > 0, part < 0):
            bits |= side.view(np.uint8) * np.uint8(place)
            place <<= 1
    bits[~following] = 255  # what leads from one run to the next is no segment
    return np.bitwise_and.reduceat(bits, at)


def _morton(box):
    """Return the place of the centre of each box along a space-filling curve through the cube around the Earth."""
    key = np.zeros(box.shape[1], np.uint64)
    for axis in range(3):
        part = ((box[axis] - box[3 + axis]) * 0.5 + 1.0) * 0.5 * (2**21 - 1)
        x = np.clip(part, 0, 2**21 - 1).astype(np.uint64)
        for shift, mask in (
            (32, 0x1F00000000FFFF),
            (16, 0x1F0000FF0000FF),
            (8, 0x100F00F00F00F00F),
            (4, 0x10C30C30C30C30C3),
            (2, 0x1249249249249249),
        ):
            x = (x | (x << np.uint64(shift))) & np.uint64(mask)
        key |= x << np.uint64(axis)
    return key


def _overlapping(levels):
    """Yield pairs of leaves whose boxes overlap, each once, some at a time."""
    top = levels[-1]
    size = top.box.shape[1]
    a, b = np.triu_indices(size)
    a, b = _tested(top, a, b)
    waiting = [(len(levels) - 1, a, b)]
    while waiting:
        depth, a, b = waiting.pop()
        if len(a) > PAIRS_AT_ONCE:
            waiting += [
                (depth, a[k : k + PAIRS_AT_ONCE], b[k : k + PAIRS_AT_ONCE]) for k in range(0, len(a), PAIRS_AT_ONCE)
            ]
            continue
        if depth == 0:
            if len(a):
                yield a, b
            continue
        pairs = [pair for pair in _children(levels[depth], levels[depth - 1], a, b) if len(pair[0])]
        if pairs:
            waiting.append((depth - 1, *(np.concatenate(side) for side in zip(*pairs, strict=True))))


def _children(level, below, a, b):
    """Yield the overlapping pairs of children of pairs of nodes."""
    first_a, count_a, first_b, count_b = level.first[a], level.count[a], level.first[b], level.count[b]
    same = a == b
    for p in range(FAN):
        for q in range(FAN):
            fit = (p < count_a) & (q < count_b)
            if p > q:
                fit &= ~same
            if fit.all():
                yield _tested(below, first_a + p, first_b + q)
            elif fit.any():
                yield _tested(below, first_a[fit] + p, first_b[fit] + q)


def _tested(level, a, b):
    """Keep the pairs whose boxes overlap, without the parts of one track that cannot meet for going straight on."""
    for axis in range(3):
        low, high = level.box[axis], level.box[3 + axis]
        fit = np.flatnonzero((low[a] + high[b] <= 0) & (low[b] + high[a] <= 0))
        a, b = a[fit], b[fit]
    if level.sense is not None and len(a):
        straight = (np.abs(level.order[a] - level.order[b]) <= 1) & (level.run[a] == level.run[b])
        straight &= (level.sense[a] & level.sense[b]) != 0
        a, b = a[~straight], b[~straight]
    return a, b


# -- segments --------------------------------------------------------------------------------------------------------


def _near_segments(lat, lon, start_a, end_a, start_b, end_b):
    """List the pairs of segments, by their first points, of pairs of leaves, whose boxes overlap.

    The boxes are of latitude and longitude about the first point, widened by what a geodesic bulges.
    """
    place = np.arange(LEAF + 1)[:, None]
    point_a = np.minimum(start_a + place, end_a)  # (LEAF + 1, p); beyond the end the last point again
    point_b = np.minimum(start_b + place, end_b)
    lat_0, lon_0 = lat[start_a], lon[start_a]
    y_a, y_b = lat[point_a] - lat_0, lat[point_b] - lat_0
    x_a, x_b = _turned(lon[point_a] - lon_0), _turned(lon[point_b] - lon_0)
    reach_y = np.maximum(np.abs(y_a).max(axis=0), np.abs(y_b).max(axis=0))
    reach_x = np.maximum(np.abs(x_a).max(axis=0), np.abs(x_b).max(axis=0))
    wide = np.cos(np.radians(np.maximum(np.abs(lat_0) - reach_y, 0.0)))  # of the meridians
    narrow = np.cos(np.radians(np.minimum(np.abs(lat_0) + reach_y, 90.0)))
    # a geodesic of length s bulges by about s^2 tan(lat) / 8; twice the extent of both leaves bounds s
    bulge = np.degrees(np.radians(reach_y + reach_x * wide) ** 2 / np.maximum(narrow, 1e-12)) + 1e-9
    bulge[(bulge > 10) | (reach_x > 90)] = 1e3  # beside a pole no box helps
    boxes = []
    for x, y, widen in ((x_a, y_a, bulge), (x_b, y_b, 0.0)):
        for part in (x, y):
            boxes.append((np.minimum(part[:-1], part[1:]) - widen, np.maximum(part[:-1], part[1:]) + widen))
    (left_a, right_a), (low_a, high_a), (left_b, right_b), (low_b, high_b) = boxes
    real_a, real_b = place[:-1] < end_a - start_a, place[:-1] < end_b - start_b
    one = start_a == start_b
    first, second = [], []
    for k in range(LEAF):
        meet = (left_a[k] <= right_b) & (left_b <= right_a[k]) & (low_a[k] <= high_b) & (low_b <= high_a[k])
        meet &= real_a[k] & real_b
        meet[: k + 1] &= ~one  # a leaf with itself: each pair once
        row, pair = np.nonzero(meet)
        first.append(start_a[pair] + k)
        second.append(start_b[pair] + row)
    first, second = np.concatenate(first), np.concatenate(second)
    first, second = np.minimum(first, second), np.maximum(first, second)
    apart = second - first > 1  # neighbours share a reading: that is no crossing
    return first[apart], second[apart]


def _turned(difference):
    """Bring differences of longitude into [-180, 180]."""
    return difference - 360.0 * np.round(difference / 360.0)


def _intersect(lat, lon, i, j):
    """Intersect segments i to i + 1 with segments j to j + 1.

    Returns
    -------
    Crossings
        Of the pairs that share one point; `i` and `j` are first points of segments, fractions 0 or 1 at their ends.
    array, shape (k, 6)
        i, j and the shared part of both segments as fractions, of the pairs that lie on each other.

    """
    lat_0, lon_0 = np.radians(lat[i]), lon[i]
    sin_0, cos_0 = np.sin(lat_0), np.cos(lat_0)
    curve = 1 - E2 * sin_0**2
    across, along = A_M / np.sqrt(curve), A_M * (1 - E2) / curve**1.5  # radii of curvature, east and north

    def project(point):
        phi, turn = np.radians(lat[point]), np.radians(_turned(lon[point] - lon_0))
        half = np.sin(turn / 2) ** 2
        rise = np.sin(np.radians(lat[point] - lat[i])) + 2 * sin_0 * np.cos(phi) * half
        cosine = np.cos(phi - lat_0) - 2 * cos_0 * np.cos(phi) * half
        near = cosine > LONGEST_COSINE
        cosine = np.where(near, cosine, np.nan)
        return across * np.cos(phi) * np.sin(turn) / cosine, along * rise / cosine

    (b_x, b_y), (c_x, c_y), (d_x, d_y) = project(i + 1), project(j), project(j + 1)
    q_x, q_y = d_x - c_x, d_y - c_y
    long_i, long_j = np.hypot(b_x, b_y), np.hypot(q_x, q_y)
    cross = b_x * q_y - b_y * q_x
    c_off, d_off = b_x * c_y - b_y * c_x, b_x * d_y - b_y * d_x
    flat = (np.abs(c_off) <= TOUCH_M * long_i) & (np.abs(d_off) <= TOUCH_M * long_i)
    with np.errstate(divide="ignore", invalid="ignore"):
        t, u = (c_x * q_y - c_y * q_x) / cross, -c_off / cross
        # an end that lies as far from the other segment touches it
        near = np.minimum(TOUCH_M * long_i * long_j / np.abs(cross), SAME_M / 2)
        shared = _shared(b_x, b_y, c_x, c_y, d_x, d_y, flat)
        end_to_end = flat & (shared[:, 1] - shared[:, 0] <= TOUCH_M / long_i)
        end_to_end &= shared[:, 1] - shared[:, 0] >= -TOUCH_M / long_i
        t, u = np.where(flat, shared[:, 0], t), np.where(flat, shared[:, 2], u)
        near = np.where(flat, TOUCH_M, near)
        hit = (t >= -near / long_i) & (t <= 1 + near / long_i) & (u >= -near / long_j) & (u <= 1 + near / long_j)
        for part, length in ((t, long_i), (u, long_j)):
            part[np.abs(part) * length <= near] = 0.0
            part[np.abs(part - 1) * length <= near] = 1.0
        angle = np.degrees(np.arctan2(np.abs(cross), np.abs(b_x * q_x + b_y * q_y)))
    hit &= ~flat | end_to_end
    same = flat & ~end_to_end & (shared[:, 1] > shared[:, 0])
    shared = np.column_stack([i, j, shared])[same]
    i, j, t, u, angle, lon_0, sin_0, cos_0 = (part[hit] for part in (i, j, t, u, angle, lon_0, sin_0, cos_0))
    ends_x, ends_y = ((0.0 * b[hit], b[hit], c[hit], d[hit]) for b, c, d in ((b_x, c_x, d_x), (b_y, c_y, d_y)))
    at_end = [t == 0, t == 1, u == 0, u == 1]
    x = np.select(at_end, ends_x, t * ends_x[1]) / across[hit]
    y = np.select(at_end, ends_y, t * ends_y[1]) / along[hit]
    level = cos_0 - y * sin_0
    at_lat = np.degrees(np.arctan2(sin_0 + y * cos_0, np.hypot(level, x)))
    at_lon = (lon_0 + np.degrees(np.arctan2(x, level)) + 180.0) % 360.0 - 180.0
    return Crossings(i, t, j, u, at_lat, at_lon, angle), shared


def _shared(b_x, b_y, c_x, c_y, d_x, d_y, flat):
    """Return the shared part of segments on one line: from, to on the first, and the same on the second, shape (p, 4).

    Where `to` is less than `from` they are apart.
    """
    square = b_x**2 + b_y**2
    t_c, t_d = (b_x * c_x + b_y * c_y) / square, (b_x * d_x + b_y * d_y) / square
    start, end = np.maximum(np.minimum(t_c, t_d), 0.0), np.minimum(np.maximum(t_c, t_d), 1.0)
    return np.column_stack([start, end, (start - t_c) / (t_d - t_c), (end - t_c) / (t_d - t_c)])


def _at_readings(c: Crossings, following) -> Crossings:
    """Say a place at the end of a segment as the start of the next one of the run, where there is one."""
    parts = []
    joined = np.append(following, False)
    for index, fraction in ((c.i, c.fraction_i), (c.j, c.fraction_j)):
        end = (fraction == 1.0) & joined[index + 1]
        parts.append((index + end, np.where(end, 0.0, fraction)))
    (i, t), (j, u) = parts
    return Crossings(i, t, j, u, c.lat, c.lon, c.angle_deg)


def _once(c: Crossings, shared) -> Crossings:
    """Drop what lies on a stretch that both passes share, and what was found on both sides of a reading."""
    if len(shared):
        c = c.take(~_on_shared(c, shared))
    c = c.take(np.lexsort((c.fraction_j, c.j, c.fraction_i, c.i)))
    near = (np.abs(np.diff(c.i)) <= 1) & (np.abs(np.diff(c.j)) <= 1)
    east = np.radians(_turned(np.diff(c.lon))) * np.cos(np.radians(c.lat[1:]))
    near &= np.hypot(np.radians(np.diff(c.lat)), east) * A_M <= SAME_M
    return c.take(~np.concatenate([[False], near])) if len(c) else c


def _on_shared(c: Crossings, shared):
    """Tell which crossings lie on a stretch that both tracks share."""
    size = int(max(c.j.max(initial=0), shared[:, 1].max())) + 2
    key = shared[:, 0].astype(np.int64) * size + shared[:, 1].astype(np.int64)
    order = np.argsort(key, kind="stable")
    key, shared = key[order], shared[order]
    on = np.zeros(len(c), bool)
    for back_i in (0, 1):  # at a reading, the segment before it counts too
        for back_j in (0, 1):
            wanted = (c.i - back_i) * size + c.j - back_j
            at = np.minimum(np.searchsorted(key, wanted), len(key) - 1)
            fit = key[at] == wanted
            t = c.fraction_i + back_i
            u = c.fraction_j + back_j
            low, high = shared[at, 2], shared[at, 3]
            low_j, high_j = np.minimum(shared[at, 4], shared[at, 5]), np.maximum(shared[at, 4], shared[at, 5])
            slack = 1e-6
            fit &= (t >= low - slack) & (t <= high + slack) & (u >= low_j - slack) & (u <= high_j + slack)
            on |= fit
    return on
