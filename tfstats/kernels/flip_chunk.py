"""Runs beyond the threshold of many rows of flips, for a statistic that grows with the size of one signed sum.

That is the one-sample t and the pooled t: with x scaled at each point so that the signed sum a lies in [-1, 1],
t = factor * a / sqrt(1 - a^2), so |t| > critical is |a| > limit.  A chunk of rows is taken through the map in blocks
of 128 points:

1. `load_scaled`, `write_tables`, `round_tables`: the scaled block, and all signed sums of each small group of units, in
   floating point and rounded to int16 in steps of which the limit is the same number at each point;
2. `screen_rows`: int16 sums find the candidates, a superset of the points beyond, mostly exact;
3. `gather_pieces`, `turn_into_t`: floating-point sums of the candidates, packed back to back, and their t all at once;
4. `append_pieces`: each piece and its mass go to the list of runs of its row; pieces with points next to the limit,
or where 1 - a^2
   would lose digits, go through `settle_piece`, which takes those points in float64 from the data.

The rows of a chunk are sorted by the signs of the leading units (`sort_rows`), whose table row then stays in cache.
A row
and its negative have the same |t|, so the first unit always counts as plus and `reversed` remembers it.
No sum here depends on what else is in the chunk.
"""

from __future__ import annotations

import math

import numpy as np

from tfstats.kernels.compile_policy import compiled
from tfstats.kernels.runs import row_starts_word
from tfstats.kernels.vector_instructions import (
    beyond_words,
    beyond_words_plainly,
    packed_window,
    packed_window_plainly,
    sum_of_first,
    sum_of_first_plainly,
    trailing_zeros,
)

__all__ = ["exact_t", "flip_chunk", "sort_rows"]

BLOCK = 128
LANES = 16
LARGE = 0.9  # a^2 above which 1 - a^2 is taken from float64 sums
ROUNDING = 12582912.0  # 1.5 * 2^23: added to a small float32 it leaves the nearest whole number in the lowest bits


@compiled
def sort_rows(flips, sizes, leading_groups, order, leading, entries, reversed_rows):
    """Order the rows of flips by the signs of their leading units, relative to the first unit.

    leading_groups: how many of the groups are looked up as one.  order (rows,): the sorted rows; leading (rows,):
    their leading code; entries
    (rows, groups - leading_groups + 1) int32: table rows of the other groups, in [:, 1:]; reversed_rows: 1 where all
    signs were
    turned.  All outputs are in sorted order.
    """
    rows = flips.shape[0]
    units = 0
    for g in range(leading_groups):
        units += sizes[g]
    codes = 1 << (units - 1)
    raw = np.empty(rows, np.int64)
    start = np.zeros(codes + 1, np.int64)
    for row in range(rows):
        turned = flips[row, 0] != 0
        code = 0
        for i in range(1, units):
            code |= ((flips[row, i] != 0) != turned) << (i - 1)
        raw[row] = code
        start[code + 1] += 1
    for code in range(codes):
        start[code + 1] += start[code]
    for row in range(rows):
        at = start[raw[row]]
        start[raw[row]] += 1
        order[at] = row
        leading[at] = raw[row]
        turned = flips[row, 0] != 0
        reversed_rows[at] = turned
        unit = units
        base = 0
        for g in range(leading_groups, sizes.shape[0]):
            code = 0
            for j in range(sizes[g]):
                code |= ((flips[row, unit + j] != 0) != turned) << j
            entries[at, g - leading_groups + 1] = base + code
            unit += sizes[g]
            base += 1 << sizes[g]


@compiled
def number_leading_rows(leading, base, entries, used):
    """Give each leading code of the chunk its own table row from `base` on; returns how many, their codes in `used`."""
    number = 0
    for row in range(leading.shape[0]):
        if row == 0 or leading[row] != leading[row - 1]:
            used[number] = leading[row]
            number += 1
        entries[row, 0] = base + number - 1
    return number


@compiled
def load_scaled(values, first, width, centre, centred, scale, block):
    """block (units, 128) = (values - centre) * scale of the points first .. first + width; 0 past them.

    The centre is float64 and taken out before rounding to the type of the values, which scale has as well.
    """
    for i in range(values.shape[0]):
        if centred:
            for k in range(width):
                block[i, k] = (values[i, first + k] - centre[first + k]) * scale[first + k]
        else:
            for k in range(width):
                block[i, k] = values[i, first + k] * scale[first + k]
        for k in range(width, BLOCK):
            block[i, k] = 0.0


@compiled
def _all_signs(block, unit, size, fixed, table, base):
    """All signed sums of units unit .. unit + size, the first always plus if fixed; returns the number of rows
    written."""
    made = 1
    for k in range(BLOCK):
        table[base, k] = block[unit, k]
    if not fixed:
        made = 2
        for k in range(BLOCK):
            table[base + 1, k] = -block[unit, k]
    for j in range(1, size):
        for row in range(made):
            for k in range(BLOCK):
                value = table[base + row, k]
                table[base + made + row, k] = value - block[unit + j, k]
                table[base + row, k] = value + block[unit + j, k]
        made *= 2
    return made


@compiled
def write_tables(block, sizes, leading_groups, table):
    """Fill table (rows, 128): the groups after the leading ones, then the first group, then the second if it leads
    as well.

    Returns the row at which the first group begins.
    """
    unit = 0
    for g in range(leading_groups):
        unit += sizes[g]
    base = 0
    for g in range(leading_groups, sizes.shape[0]):
        base += _all_signs(block, unit, sizes[g], False, table, base)
        unit += sizes[g]
    after = base + _all_signs(block, 0, sizes[0], True, table, base)
    if leading_groups == 2:
        after += _all_signs(block, sizes[0], sizes[1], False, table, after)
    return base


@compiled
def round_tables(sums, rows, quantum, rounded, bits, screen):
    """Fill screen (rows, 128) int16 with sums * quantum to the nearest whole number; rounded float32 (128,), bits
    its int32 view."""
    for row in range(rows):
        for k in range(BLOCK):
            rounded[k] = np.float32(sums[row, k]) * quantum[k] + np.float32(ROUNDING)
        for k in range(BLOCK):
            screen[row, k] = np.int16(bits[k])


@compiled
def write_leading(table, base, first_size, leading_groups, used, out):
    """Write the rows of the leading codes in `used` to table from row `out` on: the sum of the first and the second
    group's row.

    The same for floating point and for int16, so that looking the two groups up as one changes no sum.
    """
    first = 1 << (first_size - 1)
    for u in range(used.shape[0]):
        a = base + (used[u] & (first - 1))
        if leading_groups == 2:
            b = base + first + used[u] // first
            for k in range(BLOCK):
                table[out + u, k] = table[a, k] + table[b, k]
        else:
            for k in range(BLOCK):
                table[out + u, k] = table[a, k]


@compiled
def screen_rows(screen, entries, groups, rows, threshold, wide, words, origin, space):
    """Candidates of each row among the 128 points: words not 0 and origin = row * 2 + half; returns how many."""
    number = 0
    sums, flags, packed = space
    for row in range(rows):
        if wide:
            low, high = beyond_words(screen, entries, row * groups, groups, threshold)
        else:
            low, high = beyond_words_plainly(screen, entries, row * groups, groups, threshold, sums, flags, packed)
        words[number] = low
        origin[number] = 2 * row
        number += low != 0
        words[number] = high
        origin[number] = 2 * row + 1
        number += high != 0
    return number


@compiled
def exact_t(values, point, signs, centre, gain, degrees, largest):
    """t of one point of one row in float64: signs (units,) uint8, 1 for minus; t = Z * sqrt(gain * degrees / (Q -
    gain * Z^2))."""
    total = 0.0
    squares = 0.0
    for i in range(values.shape[0]):
        value = np.float64(values[i, point]) - centre
        squares += value * value
        total += -value if signs[i] != 0 else value
    spread = squares - gain * total * total
    above = gain * degrees * total * total
    if above == 0.0:
        return 0.0
    if spread * largest * largest <= above:
        return math.copysign(largest, total)
    return math.copysign(math.sqrt(above / spread), total)


@compiled
def gather_pieces(
    words,
    origin,
    number,
    row_starts,
    entries,
    groups,
    sums,
    first,
    reversed_rows,
    high,
    large,
    factor,
    uniform,
    tail,
    wide,
    packed,
    doubtful,
    window,
):
    """Cut the candidates into pieces of at most 16 points of one row, and pack the sizes |a| of their points back to
    back.

    packed: sizes and factors of points; place and 2 * row + sign of pieces.  A piece that is not plainly beyond with
    one sign
    goes to `doubtful` (number of the piece, mask of its negative points) for `settle_piece`.  Returns the numbers of
    points, pieces and doubtful pieces.
    """
    sizes, factors, places, piece_rows = packed
    doubt_piece, doubt_negative = doubtful
    # Unsigned numbers throughout: a signed index would be looked at for being negative, which costs as much as the
    # rest.
    one = np.uint64(1)
    stride = np.uint64(groups)
    origin_point = np.uint64(first)
    points = np.uint64(0)
    pieces = np.uint64(0)
    doubts = np.uint64(0)
    words[number] = 1
    origin[number] = 0
    last = np.uint64(number)
    w = np.uint64(0)
    word = words[w]
    while w < last:
        row = origin[w] >> one
        half = origin[w] & one
        # Signs and halves are as good as random: worked out by arithmetic, since a branch would be mispredicted half
        # the time.
        starts = row_starts[0] ^ ((row_starts[0] ^ row_starts[1]) & (np.uint64(0) - half))
        turned = np.uint64(0) - np.uint64(reversed_rows[row])
        # Adding the lowest bit carries through the first stretch of bits, and so clears it; what is past 16 points
        # stays.  Each
        # round waits for the word that the last one left, so few steps may lie between them.
        lowest = word & (np.uint64(0) - word)
        rest = word & ((word + lowest) | (np.uint64(0) - (lowest << np.uint64(LANES))))
        cuts = (word ^ rest) & starts & ~lowest
        if cuts != 0:
            # Another row begins inside the stretch.
            rest |= word & (np.uint64(0) - (cuts & (np.uint64(0) - cuts)))
        bit = np.uint64(trailing_zeros(word))
        length = np.uint64(trailing_zeros(~((word ^ rest) >> bit)))
        full = (one << length) - one
        offset = (half << np.uint64(6)) + bit
        if wide:
            plain, negative = packed_window(sums, entries, row * stride, groups, offset, high, large, sizes, points)
        else:
            plain, negative = packed_window_plainly(
                sums,
                entries,
                np.int64(row * stride),
                groups,
                np.int64(offset),
                high,
                large,
                sizes,
                np.int64(points),
                window,
            )
        negative = (negative ^ turned) & full
        minus = negative & one
        places[pieces] = ((origin_point + offset) << np.uint64(7)) | length
        piece_rows[pieces] = (row << one) | minus
        doubt_piece[doubts] = pieces
        doubt_negative[doubts] = negative
        mixed = ((plain & full) != full) | ((negative != 0) & (negative != full))
        wanted = mixed | (tail == 0) | ((tail == 1) == (minus == 0))
        if not uniform:
            for k in range(np.uint64(LANES)):
                factors[points + k] = factor[offset + k]
        # An unwanted piece is overwritten by the next.
        doubts += np.uint64(mixed)
        pieces += np.uint64(wanted)
        points += length * np.uint64(wanted)
        following = words[w + one]
        done = rest == 0
        w += np.uint64(done)
        word = following if done else rest
    return np.int64(points), np.int64(pieces), np.int64(doubts)


@compiled
def turn_into_t(points, sizes, factors, uniform, statistic):
    """statistic = factor * a / sqrt(1 - a^2) of the packed points; not a number where a is not below 1 (a doubtful
    point)."""
    one = sizes.dtype.type(1.0)
    if uniform:
        factor = factors[0]
        for k in range(points):
            statistic[k] = factor * sizes[k] / np.sqrt(one - sizes[k] * sizes[k])
    else:
        for k in range(points):
            statistic[k] = factors[k] * sizes[k] / np.sqrt(one - sizes[k] * sizes[k])


@compiled
def append_pieces(
    start, stop, at, places, piece_rows, statistic, by_extent, wide, places_of_rows, masses, counts, window
):
    """Append the pieces start .. stop, whose points begin at `at`, to the lists of their rows; returns where the
    next begin."""
    room = np.uint64(places_of_rows.shape[1] // 2)
    one = np.uint64(1)
    at = np.uint64(at)
    for j in range(np.uint64(start), np.uint64(stop)):
        place = places[j]
        length = place & np.uint64(127)
        if by_extent:
            total = np.float64(length)
        elif wide:
            total = np.float64(sum_of_first(statistic, at, length))
        else:
            total = np.float64(sum_of_first_plainly(statistic, np.int64(at), np.int64(length), window))
        at += length
        row = piece_rows[j] >> one
        number = np.uint64(counts[row])
        if number < room:
            places_of_rows[row, number + number] = place
            masses[row, number + number + one] = total * (1.0 - 2.0 * np.float64(piece_rows[j] & one))
        counts[row] = number + one
    return np.int64(at)


@compiled
def settle_piece(
    piece,
    negative,
    at,
    first,
    sizes,
    statistic,
    values,
    signs,
    exact,
    low,
    high,
    tail,
    by_extent,
    places,
    piece_rows,
    places_of_rows,
    masses,
    counts,
    window,
):
    """Decide each point of a doubtful piece and append the runs of points that are beyond, one sign each.

    A point next to its limit, and one with a large |a|, gets its t in float64 from the values.
    """
    centre, gain, degrees, critical, largest = exact
    start = np.int64(places[piece] >> np.uint64(7))
    length = np.int64(places[piece] & np.uint64(127))
    row = np.int64(piece_rows[piece] >> np.uint64(1))
    room = places_of_rows.shape[1] // 2
    j = 0
    while j < length:
        run = 0
        sign = (negative >> np.uint64(j)) & np.uint64(1)
        while j < length and ((negative >> np.uint64(j)) & np.uint64(1)) == sign:
            point = start + j
            size = sizes[at + j]
            t = np.float64(statistic[at + j])
            beyond = size > low[point - first]
            if beyond and (size <= high[point - first] or size * size > LARGE):
                t = abs(exact_t(values, point, signs, centre[point], gain[point], degrees[point], largest))
                beyond = t > critical[point]
            if not beyond:
                break
            window[run] = t
            run += 1
            j += 1
        if run == 0:
            j += 1
            continue
        if (tail == 1 and sign == 1) or (tail == 2 and sign == 0):
            continue
        for k in range(run, LANES):
            window[k] = 0.0
        total = np.float64(run) if by_extent else np.float64(sum_of_first_plainly(window, 0, run, window))
        number = counts[row]
        if number < room:
            places_of_rows[row, 2 * number] = ((start + j - run) << 7) | run
            masses[row, 2 * number + 1] = total * (1 - 2 * np.int64(sign))
        counts[row] = number + 1
    return at + length


@compiled
def flip_chunk(
    values,
    flips,
    order,
    leading,
    entries,
    reversed_rows,
    sizes,
    leading_groups,
    point_scale,
    exact,
    quantum,
    threshold,
    closeness,
    tail,
    by_extent,
    uniform,
    centred,
    times,
    wide,
    space,
    places_of_rows,
    masses,
    counts,
):
    """Fill the lists of runs (`runs.run_lists`) of a chunk of sorted rows; returns the longest list wanted.

    values (units, points).  point_scale: centre, scale, limit and factor of each point; exact: centre, gain,
    degrees, critical value
    by point and the largest t, see `exact_t`; quantum (points,) float32 and threshold: int16 steps and their limit;
    closeness: |a| this near to the limit is settled exactly; uniform: the factor is the same at all
    points; centred: centre is not 0 everywhere.
    """
    sums, screen, block, rounded, words, origin, packed, statistic, doubtful, limits, used, plain_space, window = space
    points = values.shape[1]
    rows = order.shape[0]
    groups = entries.shape[1]
    fixed_rows = 1 << (sizes[0] - 1)
    for g in range(1, sizes.shape[0]):
        fixed_rows += 1 << sizes[g]
    leading_number = number_leading_rows(leading, fixed_rows, entries, used)
    flat_entries = entries.reshape(-1)
    flat_sums = sums.reshape(-1)
    flat_screen = screen.reshape(-1)
    bits = rounded.view(np.int32)
    centre, scale, limit, factor = point_scale
    low, high, factor_here = limits
    packed_sizes, factors, places, piece_rows = packed
    doubt_piece, doubt_negative = doubtful
    large = sums.dtype.type(math.sqrt(LARGE))
    steps = np.zeros(BLOCK, np.float32)
    counts[:] = 0
    factors[0] = factor[0]
    for first in range(0, points, BLOCK):
        width = min(BLOCK, points - first)
        load_scaled(values, first, width, centre, centred, scale, block)
        for k in range(BLOCK):
            steps[k] = quantum[first + k] if k < width else 0.0
            low[k] = limit[first + k] - closeness if k < width else np.inf
            high[k] = limit[first + k] + closeness if k < width else np.inf
            factor_here[k] = factor[first + k] if k < width else 0.0
        base = write_tables(block, sizes, leading_groups, sums)
        round_tables(sums, fixed_rows, steps, rounded, bits, screen)
        write_leading(sums, base, sizes[0], leading_groups, used[:leading_number], fixed_rows)
        write_leading(screen, base, sizes[0], leading_groups, used[:leading_number], fixed_rows)
        number = screen_rows(flat_screen, flat_entries, groups, rows, threshold, wide, words, origin, plain_space)
        row_starts = (row_starts_word(first, times), row_starts_word(first + 64, times))
        done, pieces, doubts = gather_pieces(
            words,
            origin,
            number,
            row_starts,
            flat_entries,
            groups,
            flat_sums,
            first,
            reversed_rows,
            high,
            large,
            factor_here,
            uniform,
            tail,
            wide,
            packed,
            doubtful,
            window,
        )
        turn_into_t(done, packed_sizes, factors, uniform, statistic)
        begun = 0
        at = 0
        for d in range(doubts):
            piece = doubt_piece[d]
            at = append_pieces(
                begun, piece, at, places, piece_rows, statistic, by_extent, wide, places_of_rows, masses, counts, window
            )
            signs = flips[order[piece_rows[piece] >> np.uint64(1)]]
            at = settle_piece(
                piece,
                doubt_negative[d],
                at,
                first,
                packed_sizes,
                statistic,
                values,
                signs,
                exact,
                low,
                high,
                tail,
                by_extent,
                places,
                piece_rows,
                places_of_rows,
                masses,
                counts,
                window,
            )
            begun = piece + 1
        append_pieces(
            begun, pieces, at, places, piece_rows, statistic, by_extent, wide, places_of_rows, masses, counts, window
        )
    longest = 0
    for row in range(rows):
        longest = max(longest, counts[row])
    return longest
