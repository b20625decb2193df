"""All images of a line: where its image curves begin, and what is kept of them."""

from __future__ import annotations

import numpy as np

from crossing.shooting.compiled import kernel
from crossing.shooting.tracks.image_curves import COLUMNS, EXITED, clearance, follow, leaf_at, line_state, outside
from crossing.shooting.tree import _find

__all__ = ["edge_roots", "star_backgrounds", "trace_boxes"]

# Along an edge, steps are this share of the distance to where the line can be, and not below the floor.
_EDGE_SHARE = 0.2
_EDGE_FLOOR = 1e-4
_EDGE_CLOSE = 1e-10
_MOST_ROOTS = 4096
_MOST_TRIES = 4
# Curves leave a box where the edges say, to this share of the distance from the origin.
_SAME_EXIT = 1e-3
_SAME_PLACE = 1e-7


@kernel
def star_backgrounds(which, scene, out):
    """Source positions that stars cover: those of the lens map at a star without the star.

    Parameters
    ----------
    which : (m,) ndarray
        Stars, inside the region of the tree.
    scene : tuple
        See `line_state`.
    out : (m, 3) ndarray
        u, v, and the distance of the nearest other star, infinite if none is near.
    """
    lens, tree, roots, root_node, children, stars = scene
    centre, _, inside, real, imag, near_start, near = tree
    star_x, star_y, star_mass = stars
    for i in range(len(which)):
        x, y = star_x[which[i]], star_y[which[i]]
        leaf = _find(x, y, roots, root_node, children)
        z = complex(x - centre[leaf, 0], y - centre[leaf, 1])
        value = 0j
        for k in range(real.shape[1] - 1, -1, -1):
            value = value * z + complex(real[leaf, k], imag[leaf, k])
        nearest = np.inf
        for slot in range(near_start[leaf], near_start[leaf + 1]):
            star = near[slot]
            if star == which[i]:
                continue
            dx, dy = x - star_x[star], y - star_y[star]
            square = dx * dx + dy * dy
            nearest = min(nearest, np.sqrt(square))
            value += star_mass[star] * complex(dx / square, -dy / square)
        sheet = lens[4] if inside[leaf] else 0.0
        out[i, 0] = (lens[0] + sheet) * x + 0.5 * lens[2] * x * x + lens[3] * x * y - value.real
        out[i, 1] = (lens[1] + sheet) * y + 0.5 * lens[3] * x * x + value.imag
        out[i, 2] = nearest


@kernel
def edge_roots(start, stop, h, scene, line, floor, found, inward):
    """Where image curves cross an edge.

    Parameters
    ----------
    start, stop : complex
        Ends of the edge.
    h, scene, line
        See `follow`.
    floor : float
        Smallest step: pairs of crossings closer than this may be missed, both.
    found : (k,) complex ndarray
        Filled with the points.
    inward : (k,) ndarray of bool
        Whether the curve goes to the left of the edge's direction there.

    Returns
    -------
    roots, evaluations : int
        Numbers; points beyond the room of `found` are counted and lost.
    """
    length = abs(stop - start)
    along = (stop - start) / length
    at, before_at, before, roots, used = 0.0, 0.0, np.nan, 0, 0
    while True:
        z = start + at * along
        leaf = leaf_at(z, scene)
        state = line_state(z.real, z.imag, leaf, scene, line)
        used += 1
        gap = state[2] - h
        if gap * before < 0.0:
            more, z, slope = _edge_root(start, along, before_at, at, before, gap, h, scene, line)
            used += more
            if roots < len(found):
                found[roots], inward[roots] = z, ((1j * along).conjugate() / slope).real > 0.0
            roots += 1
        if at >= length:
            return roots, used
        before_at, before = at, gap
        bend = max(abs(state[4]), 1e-300)
        reach = min(abs(gap) / abs(state[3]), 2.0 * abs(state[3]) / bend)
        # Where w rises or falls along the edge, and will for a while, no two roots lie side by side.
        reach = max(reach, abs((state[3] * along).imag) / bend)
        # A star beside the edge makes a peak that is not seen from afar.
        reach = min(reach, 2.0 * clearance(z, scene, leaf))
        at = min(length, at + max(_EDGE_SHARE * reach, floor))


@kernel
def _edge_root(start, along, low, high, low_gap, high_gap, h, scene, line):
    """Root between two points of an edge, by Newton's method kept between them; evaluations, the point, and G there."""
    at, used = low + (high - low) * low_gap / (low_gap - high_gap), 0
    z, state = start, line_state(start.real, start.imag, leaf_at(start, scene), scene, line)
    for _ in range(80):
        z = start + at * along
        state = line_state(z.real, z.imag, leaf_at(z, scene), scene, line)
        used += 1
        gap = state[2] - h
        if gap * low_gap > 0.0:
            low = at
        else:
            high = at
        # The gradient of w is i conj(G).
        slope = (1j * state[3].conjugate() * along.conjugate()).real
        new = at - gap / slope if slope != 0.0 else low
        # What is left after a step goes with its square.
        if abs(new - at) < _EDGE_CLOSE * (1.0 + abs(z)):
            return used, start + new * along, state[3]
        at = new if low < new < high else 0.5 * (low + high)
    return used, z, state[3]


@kernel
def _start(star, h, scene, line, ends, limits, box):
    """First point of a star's curve, inside the box, a length that it may be off, and evaluations."""
    star_x, star_y, star_mass = scene[5]
    place = complex(star_x[star], star_y[star])
    furthest = min(limits[1], ends[star, 0] + ends[star, 2])
    behind = ends[star, 0] - max(furthest, ends[star, 0] + ends[star, 3])
    used, z = 0, place
    for _ in range(60):
        offset = complex(line[0], line[1]) * star_mass[star] / complex(behind, h - ends[star, 1])
        z = place + offset
        if outside(z, box):
            behind *= 2.0
            continue
        used += 1
        # The pole alone says p but roughly, and nothing of the curve may be left out.
        short = furthest - line_state(z.real, z.imag, leaf_at(z, scene), scene, line)[1]
        if short <= 0.0:
            break
        behind -= 1.2 * short + 1e-9 * abs(behind)
    return z, 0.3 * abs(z - place), used


@kernel
def _begins(z, stars, begun, scene, line, ends):
    """Whether a curve that comes in is one of a star of the box, before the point from which it is followed."""
    star_x, star_y, star_mass = scene[5]
    for k in range(len(stars)):
        offset = z - complex(star_x[stars[k]], star_y[stars[k]])
        before = abs(offset) < abs(begun[k] - z + offset)
        if before and star_mass[stars[k]] >= abs(offset) * ends[stars[k], 3]:
            # The pole alone says on which side of the star that is.
            return (complex(line[0], line[1]) * offset.conjugate()).real < 0.0
    return False


@kernel
def _box_entries(box, h, scene, line, floor, room, entries, exits):
    """Curves that come into a box and those that go out: their numbers, and evaluations."""
    corners = (complex(box[0], box[2]), complex(box[1], box[2]), complex(box[1], box[3]), complex(box[0], box[3]))
    found, inward = np.empty(room, dtype=np.complex128), np.empty(room, dtype=np.bool_)
    into, out, used = 0, 0, 0
    for edge in range(4):
        roots, more = edge_roots(corners[edge], corners[(edge + 1) % 4], h, scene, line, floor, found, inward)
        used += more
        for i in range(min(roots, room)):
            if inward[i] and into < room:
                entries[into] = found[i]
                into += 1
            elif not inward[i] and out < room:
                exits[out] = found[i]
                out += 1
        out += max(0, roots - room)
    return into, out, used


@kernel
def trace_boxes(which, boxes, order, begin, h, scene, line, bends, ends, limits, pace):
    """Follow all image curves of a line in some boxes of the image plane.

    Parameters
    ----------
    which : (m,) ndarray
        Boxes to trace.
    boxes : (n, 4) ndarray
        x_low, x_high, y_low, y_high of all boxes; they do not overlap.
    order, begin : ndarray
        Stars of box b are order[begin[b]:begin[b + 1]].
    h, scene, line, bends, ends, limits, pace
        See `follow`.

    Returns
    -------
    nodes : (k, COLUMNS) ndarray
        See `follow`.
    starts : (m + 1,) ndarray
        Rows at which the nodes of each box begin.
    evaluations : int
        Evaluations of the lens map.
    faults : int
        Boxes in which some curve was lost, a star was not reached once, or curves went out otherwise than the edges
        say, even at smaller steps.
    """
    room, count, total, faults = 2000 + 100 * len(which), 0, 0, 0
    nodes = np.empty((room, COLUMNS))
    starts = np.zeros(len(which) + 1, dtype=np.int64)
    visits, ended = np.zeros(len(scene[5][0]), dtype=np.int64), np.empty(_MOST_ROOTS, dtype=np.int64)
    for i in range(len(which)):
        box, stars = boxes[which[i]], order[begin[which[i]] : begin[which[i] + 1]]
        begun = np.empty(len(stars), dtype=np.complex128)
        entries, exits = np.empty(_MOST_ROOTS, dtype=np.complex128), np.empty(_MOST_ROOTS, dtype=np.complex128)
        finer, complete, first = 1.0, False, count
        for _ in range(_MOST_TRIES):
            count = first
            into, out, used = _box_entries(box, h, scene, line, _EDGE_FLOOR * finer**3, _MOST_ROOTS, entries, exits)
            total += used
            gone, lost, cut, skipped, met = 0, 0, 0, 0, np.zeros(min(out, _MOST_ROOTS), dtype=np.bool_)
            visits[stars] = 0
            for curve in range(len(stars) + into):
                if curve < len(stars):
                    z, length, used = _start(stars[curve], h, scene, line, ends, limits, box)
                    begun[curve] = z
                    total += used
                else:
                    z, length = entries[curve - len(stars)], 1.0
                    if _begins(z, stars, begun, scene, line, ends):
                        skipped += 1
                        continue
                while True:
                    reached, end, z_end, used = follow(
                        z, length, h, scene, line, bends, ends, limits, box, pace * finer, nodes, count, room
                    )
                    total += used
                    if reached < room:
                        break
                    bigger = np.empty((2 * room, COLUMNS))
                    bigger[:count] = nodes[:count]
                    nodes, room = bigger, 2 * room
                count = reached
                if end >= 0 and curve >= len(stars) and abs(z_end - z) < _SAME_PLACE * (1.0 + abs(z)):
                    ended[cut] = end
                    cut += 1
                elif end >= 0:
                    visits[end] += 1
                elif end == EXITED:
                    gone += 1
                    if len(met):
                        nearest = np.argmin(np.abs(exits[: len(met)] - z_end))
                        if abs(exits[nearest] - z_end) < _SAME_EXIT * (1.0 + abs(z_end)):
                            met[nearest] = True
                else:
                    lost += 1
            twice = skipped
            for star in ended[:cut]:
                twice += min(visits[star], 1)
                visits[star] = 1
            # A star's curve that is given up inside, or taken up there, may cross the edge where it is not followed.
            complete = bool(lost == 0 and gone + twice == out and (~met).sum() <= twice and (visits[stars] == 1).all())
            if complete:
                break
            finer *= 0.5
        faults += 0 if complete else 1
        starts[i + 1] = count
    return nodes[:count].copy(), starts, total, faults
