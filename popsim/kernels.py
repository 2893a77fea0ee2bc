"""All compiled code: float64 and int64 arrays and scalars in, nothing of ours imported.

Plasma is a sum of modes that fall off at the hybrid rates of a mammillary model; the effect site follows plasma at
ke0. Between events everything is known in closed form. The effect site is never a difference of exponentials: each
step adds nonnegative terms only, so nothing cancels when ke0 meets a hybrid rate or when rates lie decades apart.
Kernels never raise: a patient that cannot be computed carries a status code (worded in solve.py).
"""

import math

import numba
import numpy as np

CACHED = True  # False where no place for compiled code could be found: every process then compiles anew

FINE = 0
NOT_POSITIVE = 1
NOT_FINITE = 2
OUT_OF_REACH = 3
BAD_EVENT = 4
BAD_WINDOW = 5
BAD_LIMITS = 6
NO_EFFECT_SITE = 7

EPSILON = 2.220446049250313e-16
LANE = 32  # patients that step together
MOST_STEPS = 200  # of any root search; halving alone ends well before

PLASMA, EFFECT_SITE, SLOPE, LAG = 0, 1, 2, 3  # the functions of time that roots are sought of

NEGATIVE_BIN, ZERO_BIN, UNDER_BIN, FIRST_BIN = 0, 1, 2, 3
LOWEST_OCTAVE, OCTAVES, BINS_PER_OCTAVE_LOG2 = -24, 40, 7
OVER_BIN = FIRST_BIN + (OCTAVES << BINS_PER_OCTAVE_LOG2)
BIN_COUNT = OVER_BIN + 1


def _compiled(function):
    """Compile with a cache on disk, or without one where none can be placed (read-only install and home)."""
    global CACHED
    try:
        return numba.njit(cache=True, nogil=True, error_model="numpy")(function)
    except RuntimeError:
        CACHED = False
        return numba.njit(nogil=True, error_model="numpy")(function)


# ---- hybrid rates and weights ----


@_compiled
def _excess(a, b, c):
    """a - b c, the product's rounding error included (Dekker 1971, Numerische Mathematik 18:224)."""
    product = b * c
    scaled = 134217729.0 * b
    b_high = scaled - (scaled - b)
    scaled = 134217729.0 * c
    c_high = scaled - (scaled - c)
    b_low, c_low = b - b_high, c - c_high
    error = ((b_high * c_high - product) + b_high * c_low + b_low * c_high) + b_low * c_low
    return (a - product) - error


@_compiled
def _secular(poles, residues, count, v1, origin, side, offset):
    """The secular function, the sum of residue/(x - pole) - V1, at x = poles[origin] + side * offset; its slope in x
    and the size of its terms.

    Near a pole P other than 0, CL/x - V1 is taken as (CL - V1 P)/P - (x - P) CL/(P x), which does not cancel: else a
    compartment that hardly exchanges, at a rate near CL/V1, would get a wrong weight.
    """
    x = poles[origin] + side * offset
    value, slope, size = -v1, 0.0, v1
    for j in range(count):
        distance = (poles[origin] - poles[j]) + side * offset
        term = residues[j] / distance
        slope -= term / distance
        if j == 0 and origin > 0 and offset < poles[origin]:
            surplus = _excess(residues[0], v1, poles[origin]) / poles[origin]
            change = side * offset / poles[origin] * (residues[0] / x)
            value = surplus - change
            size = abs(surplus) + abs(change)
        else:
            value += term
            size += abs(term)
    return value, slope, size


@_compiled
def _secular_offset(poles, residues, count, v1, origin, side, low, high):
    """The offset in (low, high) at which the secular function is zero: Newton in 1/offset, kept inside a bracket."""
    offset = math.sqrt(low) * math.sqrt(high)
    for step in range(MOST_STEPS):
        value, slope, size = _secular(poles, residues, count, v1, origin, side, offset)
        value *= side  # now falling with the offset
        if abs(value) <= 0.5 * EPSILON * size:
            return offset
        if value > 0.0:
            low = offset
        else:
            high = offset
        tangent = value + slope * offset
        following = -1.0
        if tangent < 0.0 and step < MOST_STEPS // 4:
            following = slope * offset * (offset / tangent)
        if not (low < following < high):
            following = math.sqrt(low) * math.sqrt(high)
        if abs(following - offset) <= EPSILON * following:
            return following
        offset = following
    return offset


@_compiled
def _poles(cl, v2, q2, v3, q3, poles, residues):
    """Write the poles 0 < p < q of the secular function and their residues; return how many there are."""
    poles[0], residues[0] = 0.0, cl
    count = 1
    k21, k31 = q2 / v2, q3 / v3
    if q2 > 0.0 and q3 > 0.0 and k21 == k31:  # two compartments of one rate act as one
        poles[1], residues[1] = k21, q2 + q3
        return 2
    if q2 > 0.0:
        poles[1], residues[1] = k21, q2
        count = 2
    if q3 > 0.0:
        if count == 2 and k31 < k21:
            poles[2], residues[2] = k21, q2
            poles[1], residues[1] = k31, q3
        else:
            poles[count], residues[count] = k31, q3
        count += 1
    return count


@_compiled
def _nearest_pole(poles, residues, count, v1, i):
    """Root i lies above pole i and below the next: which is nearer, on which side, and a bracket of the offset."""
    if i == count - 1:
        origin, side, high = i, 1.0, 0.0
        for j in range(count):
            high += residues[j]
        high *= 2.0 / v1
    else:
        half = 0.5 * (poles[i + 1] - poles[i])
        value, _, _ = _secular(poles, residues, count, v1, i, 1.0, half)
        origin, side, high = (i + 1, -1.0, half) if value > 0.0 else (i, 1.0, half)
    others = v1
    for j in range(count):
        if j != origin:
            others += 2.0 * residues[j] / abs(poles[origin] - poles[j])
    return origin, side, 0.5 * residues[origin] / others, high


@_compiled
def _parameter_status(v1, cl, v2, q2, v3, q3, ke0):
    """FINE, NOT_FINITE or NOT_POSITIVE."""
    total = v1 + cl + v2 + q2 + v3 + q3 + ke0
    if not math.isfinite(total):
        return NOT_FINITE
    if v1 <= 0.0 or cl <= 0.0 or v2 <= 0.0 or v3 <= 0.0 or q2 < 0.0 or q3 < 0.0 or ke0 < 0.0:
        return NOT_POSITIVE
    return FINE


@_compiled
def disposition(v1, cl, v2, q2, v3, q3, ke0, rates, weights, status):
    """Hybrid rates and weights of every patient. A compartment with Q = 0 is absent.

    The rates solve CL/x = V1 + Q2/(k21 - x) + Q3/(k31 - x), each found as an offset from its nearest pole so that
    close roots and poles keep their distance; the weight is 1/(V1 + sum of Q k/(k - x)^2), all terms positive.
    """
    poles, residues = np.empty(3), np.empty(3)
    for i in range(v1.size):
        rates[i, :] = 1.0
        weights[i, :] = 0.0
        status[i] = _parameter_status(v1[i], cl[i], v2[i], q2[i], v3[i], q3[i], ke0[i])
        if status[i] != FINE:
            continue
        count = _poles(cl[i], v2[i], q2[i], v3[i], q3[i], poles, residues)
        for root in range(count):
            origin, side, low, high = _nearest_pole(poles, residues, count, v1[i], root)
            if not (0.0 < low <= high < math.inf):
                status[i] = OUT_OF_REACH
                break
            offset = _secular_offset(poles, residues, count, v1[i], origin, side, low, high)
            volume = v1[i]
            for j in range(1, count):
                distance = (poles[origin] - poles[j]) + side * offset
                volume += residues[j] / distance * (poles[j] / distance)
            rates[i, root] = poles[origin] + side * offset
            weights[i, root] = 1.0 / volume
            if not (0.0 < rates[i, root] < math.inf):
                status[i] = OUT_OF_REACH


# ---- steps ----


@_compiled
def _mean_exponential(z):
    """(1 - exp(-z))/z: the mean of exp(-s) for s from 0 to z."""
    return -math.expm1(-z) / z if z != 0.0 else 1.0


@_compiled
def _second_difference(a, b):
    """Second divided difference of exp(-s) at 0, a, b >= 0: positive, at worst a factor of 3 lost in rounding."""
    if a > b:
        a, b = b, a
    if b >= 1.0:
        return (_mean_exponential(a) - math.exp(-a) * _mean_exponential(b - a)) / b
    power, homogeneous, factorial, total, sign = 1.0, 1.0, 2.0, 0.5, -1.0
    for n in range(1, 20):
        power *= a
        homogeneous = b * homogeneous + power  # complete homogeneous polynomial of degree n in a and b
        factorial *= n + 2.0
        term = homogeneous / factorial
        total += sign * term
        if term < 1e-18:
            break
        sign = -sign
    return total


@_compiled
def _factors(rates, weights, ke0, h):
    """What a step of length h does: three factors that keep, three that infuse, three from plasma to the effect
    site, one that keeps the effect site, one that infuses it."""
    keep, infuse, pass1, pass2, pass3 = 1.0, 0.0, 0.0, 0.0, 0.0
    if ke0 > 0.0:
        k = ke0 * h
        keep = math.exp(-k)
        for i in range(3):
            infuse += weights[i] * _second_difference(rates[i] * h, k)
        infuse *= k * h
        pass1 = k * _passed_on(rates[0], ke0, h)
        pass2 = k * _passed_on(rates[1], ke0, h)
        pass3 = k * _passed_on(rates[2], ke0, h)
    return (
        math.exp(-rates[0] * h),
        math.exp(-rates[1] * h),
        math.exp(-rates[2] * h),
        weights[0] * h * _mean_exponential(rates[0] * h),
        weights[1] * h * _mean_exponential(rates[1] * h),
        weights[2] * h * _mean_exponential(rates[2] * h),
        pass1,
        pass2,
        pass3,
        keep,
        infuse,
    )


@_compiled
def _passed_on(a, b, h):
    """First divided difference of exp(-s) at a h and b h: exp(-smaller) times a mean exponential, never negative."""
    return math.exp(-min(a, b) * h) * _mean_exponential(abs(a - b) * h)


@_compiled
def _moved(state, rate, f):
    """State (three modes of plasma, effect site) after the step whose factors are f, under a constant rate."""
    x1, x2, x3, site = state
    return (
        x1 * f[0] + rate * f[3],
        x2 * f[1] + rate * f[4],
        x3 * f[2] + rate * f[5],
        site * f[9] + (x1 * f[6] + x2 * f[7] + x3 * f[8]) + rate * f[10],
    )


@_compiled
def _after(state, rate, rates, weights, ke0, h):
    """State after h minutes."""
    return _moved(state, rate, _factors(rates, weights, ke0, h))


@_compiled
def check_events(time, bolus, rate, status):
    """Set BAD_EVENT for patients whose events are not ascending, or not finite, or whose doses are negative."""
    for i in range(time.shape[0]):
        if status[i] != FINE:
            continue
        previous = -math.inf
        for j in range(time.shape[1]):
            at = time[i, j]
            if not at >= previous or at == -math.inf:
                status[i] = BAD_EVENT
            elif at < math.inf and not (0.0 <= bolus[i, j] < math.inf and 0.0 <= rate[i, j] < math.inf):
                status[i] = BAD_EVENT
            previous = at


@_compiled
def _met(i, state, flow, event, begin, end, time, bolus, rate, rates, weights, ke0):
    """Patient i's state, rate and number of events at `end`, after doses at that time, from `begin`."""
    now = begin
    while event < time.shape[1] and time[i, event] <= end:
        if time[i, event] > now:
            state = _after(state, flow, rates[i], weights[i], ke0[i], time[i, event] - now)
            now = time[i, event]
        x1, x2, x3, site = state
        dose = bolus[i, event]
        state = x1 + dose * weights[i, 0], x2 + dose * weights[i, 1], x3 + dose * weights[i, 2], site
        flow = rate[i, event]
        event += 1
    if now < end:
        state = _after(state, flow, rates[i], weights[i], ke0[i], end - now)
    return state, flow, event


@_compiled
def _reached(i, end, time, bolus, rate, rates, weights, ke0):
    """The same from the first event, before which there is nothing."""
    begin = min(time[i, 0], end) if time.shape[1] > 0 else end
    return _met(i, (0.0, 0.0, 0.0, 0.0), 0.0, 0, begin, end, time, bolus, rate, rates, weights, ke0)


@_compiled
def _lane_moved(s):
    """One grid step for all patients of a lane. Rows of the flat scratch `s`, LANE numbers each, at constant offsets
    so that the compiler vectorises: 0-3 state, 4 rate, 5-15 factors, 16 plasma."""
    for p in range(LANE):
        x1, x2, x3, rate = s[p], s[LANE + p], s[2 * LANE + p], s[4 * LANE + p]
        passed = x1 * s[11 * LANE + p] + x2 * s[12 * LANE + p] + x3 * s[13 * LANE + p]
        s[3 * LANE + p] = s[3 * LANE + p] * s[14 * LANE + p] + passed + rate * s[15 * LANE + p]
        x1 = x1 * s[5 * LANE + p] + rate * s[8 * LANE + p]
        x2 = x2 * s[6 * LANE + p] + rate * s[9 * LANE + p]
        x3 = x3 * s[7 * LANE + p] + rate * s[10 * LANE + p]
        s[p], s[LANE + p], s[2 * LANE + p], s[16 * LANE + p] = x1, x2, x3, x1 + x2 + x3


@_compiled
def _lane_state(s, p):
    return s[p], s[LANE + p], s[2 * LANE + p], s[3 * LANE + p]


@_compiled
def _lane_set(s, p, state, flow):
    x1, x2, x3, site = state
    s[p], s[LANE + p], s[2 * LANE + p], s[3 * LANE + p], s[4 * LANE + p] = x1, x2, x3, site, flow
    s[16 * LANE + p] = x1 + x2 + x3


@_compiled
def courses(rates, weights, ke0, status, time, bolus, rate, grid, length_of, lengths, plasma, effect_site):
    """Both courses at every grid time, just after doses at that time; NaN for patients with a status.

    length_of[t] is the index in `lengths` of the step from grid[t] to grid[t + 1]. Patients go in lanes of LANE: time
    is the outer loop, patients the inner one; only a patient whose event falls inside a step walks it alone.
    """
    s, table = np.empty(17 * LANE), np.empty((lengths.size, 11 * LANE))
    before, upcoming, event = np.empty(4 * LANE), np.empty(LANE), np.empty(LANE, np.int64)
    for first in range(0, ke0.size, LANE):
        width = min(LANE, ke0.size - first)
        s[:], table[:], upcoming[:] = 0.0, 0.0, math.inf
        for p in range(width):
            i = first + p
            if status[i] != FINE:
                continue
            for c in range(lengths.size):
                f = _factors(rates[i], weights[i], ke0[i], lengths[c])
                for r in range(11):
                    table[c, r * LANE + p] = f[r]
            state, flow, event[p] = _reached(i, grid[0], time, bolus, rate, rates, weights, ke0)
            _lane_set(s, p, state, flow)
            if event[p] < time.shape[1]:
                upcoming[p] = time[i, event[p]]
        loaded, earliest = -1, upcoming.min()
        for t in range(grid.size):
            if t > 0:
                if length_of[t - 1] != loaded:
                    loaded = length_of[t - 1]
                    s[5 * LANE : 16 * LANE] = table[loaded]
                if earliest <= grid[t]:
                    before[:] = s[: 4 * LANE]
                _lane_moved(s)
                if earliest <= grid[t]:
                    for p in range(width):
                        if upcoming[p] > grid[t]:
                            continue
                        i, begin, state = first + p, grid[t], _lane_state(s, p)
                        if upcoming[p] < grid[t]:
                            begin, state = grid[t - 1], _lane_state(before, p)
                        state, flow, event[p] = _met(i, state, s[4 * LANE + p], event[p], begin, grid[t],
                                                     time, bolus, rate, rates, weights, ke0)  # fmt: skip
                        _lane_set(s, p, state, flow)
                        upcoming[p] = time[i, event[p]] if event[p] < time.shape[1] else math.inf
                    earliest = upcoming.min()
            for p in range(width):
                plasma[first + p, t] = s[16 * LANE + p]
                effect_site[first + p, t] = s[3 * LANE + p]
        for p in range(width):
            if status[first + p] != FINE:
                plasma[first + p, :] = math.nan
                effect_site[first + p, :] = math.nan


# ---- exact windows ----


@_compiled
def _slopes(state, rate, rates, weights, ke0):
    """What turning points hang on: plasma's slope is the sum of d_i exp(-rate_i t); the lag is plasma less effect
    site now; and the slowest rate of either, by which both are scaled lest they vanish."""
    d1 = rate * weights[0] - rates[0] * state[0]
    d2 = rate * weights[1] - rates[1] * state[1]
    d3 = rate * weights[2] - rates[2] * state[2]
    slowest = math.inf
    if d1 != 0.0:
        slowest = rates[0]
    if d2 != 0.0:
        slowest = min(slowest, rates[1])
    if d3 != 0.0:
        slowest = min(slowest, rates[2])
    if slowest == math.inf:
        slowest = ke0
    return d1, d2, d3, state[0] + state[1] + state[2] - state[3], slowest


@_compiled
def _function(kind, t, state, rate, slopes, rates, weights, ke0):
    """Plasma, effect site, or (times a positive factor) plasma's slope or plasma less effect site, t minutes on."""
    if kind == PLASMA:
        x1, x2, x3, _ = _after(state, rate, rates, weights, 0.0, t)
        return x1 + x2 + x3
    if kind == EFFECT_SITE:
        return _after(state, rate, rates, weights, ke0, t)[3]
    total = 0.0
    if kind == SLOPE:
        for i in range(3):
            if slopes[i] != 0.0:
                total += slopes[i] * math.exp(-(rates[i] - slopes[4]) * t)
        return total
    slowest = min(slopes[4], ke0)
    for i in range(3):
        if slopes[i] != 0.0:
            total += slopes[i] * _passed_on(rates[i] - slowest, ke0 - slowest, t)
    return slopes[3] * math.exp(-(ke0 - slowest) * t) + total * t


@_compiled
def _root(kind, level, a, b, fa, fb, state, rate, slopes, rates, weights, ke0):
    """Where the function passes `level` between a and b, where it lies on either side (fa, fb: less the level).

    Method: Chandrupatla 1997, Advances in Engineering Software 28:145 (inverse quadratic steps, else halving).
    """
    if fa == 0.0:
        return a
    if fb == 0.0:
        return b
    smallest = 1e-18 * abs(b - a)
    t = 0.5
    for _ in range(MOST_STEPS):
        x = a + t * (b - a)
        f = _function(kind, x, state, rate, slopes, rates, weights, ke0) - level
        if (f > 0.0) == (fa > 0.0):
            c, fc = a, fa
        else:
            c, fc, b, fb = b, fb, a, fa
        a, fa = x, f
        best, least = (a, fa) if abs(fa) < abs(fb) else (b, fb)
        width = abs(b - a)
        tolerance = EPSILON * abs(best) + smallest
        if least == 0.0 or width <= 2.0 * tolerance:
            return best
        xi, phi = (a - b) / (c - b), (fa - fb) / (fc - fb)
        t = 0.5
        if phi * phi < xi and (1.0 - phi) * (1.0 - phi) < 1.0 - xi:
            t = fa / (fb - fa) * (fc / (fb - fc)) + (c - a) / (b - a) * (fa / (fc - fa)) * (fb / (fc - fb))
        t = min(1.0 - tolerance / width, max(tolerance / width, t))
    return best


@_compiled
def _opposite(fa, fb):
    return (fa < 0.0 and fb > 0.0) or (fa > 0.0 and fb < 0.0)


@_compiled
def _between(kind, cuts, count, roots, state, rate, slopes, rates, weights, ke0):
    """Sign changes of the function between neighbouring cuts, written to `roots`; returns how many."""
    found = 0
    fa = _function(kind, cuts[0], state, rate, slopes, rates, weights, ke0)
    for j in range(1, count):
        fb = _function(kind, cuts[j], state, rate, slopes, rates, weights, ke0)
        if _opposite(fa, fb):
            roots[found] = _root(kind, 0.0, cuts[j - 1], cuts[j], fa, fb, state, rate, slopes, rates, weights, ke0)
            found += 1
        fa = fb
    return found


@_compiled
def _monotone_cuts(kind, length, cuts, roots, state, rate, slopes, rates, weights, ke0):
    """Write 0, the turning points of the course, and `length` to `cuts`; return how many.

    With l1 the first rate, exp(l1 t) times plasma's slope turns at most once, at a moment known in closed form: that
    separates plasma's turning points. exp(ke0 t) (plasma - effect site) turns where plasma does: that separates the
    effect site's.
    """
    cuts[0] = 0.0
    count = 1
    second, third = (rates[1] - rates[0]) * slopes[1], (rates[2] - rates[0]) * slopes[2]
    if _opposite(second, third) and rates[2] != rates[1]:
        turn = (math.log(abs(third)) - math.log(abs(second))) / (rates[2] - rates[1])
        if 0.0 < turn < length:
            cuts[1] = turn
            count = 2
    cuts[count] = length
    stages = 2 if kind == EFFECT_SITE else 1
    for stage in range(stages):
        sought = SLOPE if stage == 0 else LAG
        found = _between(sought, cuts, count + 1, roots, state, rate, slopes, rates, weights, ke0)
        for j in range(found):
            cuts[1 + j] = roots[j]
        count = 1 + found
        cuts[count] = length
    return count + 1


@_compiled
def _passage(kind, level, a, b, ya, yb, state, rate, slopes, rates, weights, ke0):
    """When a course that is monotone from ya at a to yb at b passes the level; a or b where it lies on one side."""
    if math.isinf(level) or not _opposite(ya - level, yb - level):
        rising_over = yb > ya and ya >= level
        falling_under = yb <= ya and ya <= level
        return a if rising_over or falling_under else b
    return _root(kind, level, a, b, ya - level, yb - level, state, rate, slopes, rates, weights, ke0)


@_compiled
def _interval(kind, begin, length, low, high, cuts, roots, tally, state, rate, rates, weights, ke0):
    """Add the interval's minutes below, in and above the range to tally[0:3]; widen tally[3:5] (lowest, highest);
    set tally[5] where the range is touched, tally[6] to the last value, tally[7] to when the course first is within the
    range and tally[8] to when it last is above it."""
    slopes = _slopes(state, rate, rates, weights, ke0)
    count = _monotone_cuts(kind, length, cuts, roots, state, rate, slopes, rates, weights, ke0)
    a = cuts[0]
    ya = _function(kind, a, state, rate, slopes, rates, weights, ke0)
    for j in range(1, count):
        b = cuts[j]
        yb = _function(kind, b, state, rate, slopes, rates, weights, ke0)
        least, most = min(ya, yb), max(ya, yb)
        enters, leaves = a, b
        if low <= least and most <= high:
            tally[1] += b - a
        elif most < low:
            tally[0] += b - a
        elif least > high:
            tally[2] += b - a
        else:
            at_low = _passage(kind, low, a, b, ya, yb, state, rate, slopes, rates, weights, ke0)
            at_high = _passage(kind, high, a, b, ya, yb, state, rate, slopes, rates, weights, ke0)
            tally[0] += (at_low - a) if yb > ya else (b - at_low)
            tally[1] += abs(at_high - at_low)
            tally[2] += (b - at_high) if yb > ya else (at_high - a)
            enters = a if low <= ya <= high else (at_low if ya < low else at_high)
            leaves = b if yb > high else at_high
        tally[3] = min(tally[3], least)
        tally[4] = max(tally[4], most)
        if least <= high and most >= low:
            tally[5] = 1.0
            tally[7] = min(tally[7], begin + enters)
        if most > high:
            tally[8] = begin + leaves
        tally[6] = yb
        a, ya = b, yb


@_compiled
def _one_window(kind, i, start, end, low, high, cuts, roots, tally, time, bolus, rate, rates, weights, ke0):
    """Walk one patient's window from event to event."""
    tally[:] = 0.0
    tally[3], tally[4], tally[7], tally[8] = math.inf, -math.inf, math.inf, -math.inf
    state, flow, event = _reached(i, start, time, bolus, rate, rates, weights, ke0)
    if start == end:
        value = state[3] if kind == EFFECT_SITE else state[0] + state[1] + state[2]
        zone = 0 if value < low else (2 if value > high else 1)
        tally[zone] = 1.0
        tally[3:7] = value
        tally[5] = 1.0 if zone == 1 else 0.0
        tally[7] = start if zone == 1 else math.inf
        tally[8] = start if zone == 2 else -math.inf
    now = start
    while now < end:
        until = min(end, time[i, event]) if event < time.shape[1] else end
        _interval(kind, now, until - now, low, high, cuts, roots, tally, state, flow, rates[i], weights[i], ke0[i])
        if until < end:
            state, flow, event = _met(i, state, flow, event, now, until, time, bolus, rate, rates, weights, ke0)
        now = until


@_compiled
def windows(kind, rates, weights, ke0, time, bolus, rate, low, high, start, end, status, shares, extremes, touched):
    """Shares below, in and above the range, extremes (lowest, highest, at the end, first inside, last above) and touch
    of each window."""
    cuts, roots, tally = np.empty(5), np.empty(3), np.empty(9)
    for i in range(ke0.size):
        if status[i] == FINE:
            if not (math.isfinite(start[i]) and math.isfinite(end[i]) and start[i] <= end[i]):
                status[i] = BAD_WINDOW
            elif not low[i] <= high[i]:
                status[i] = BAD_LIMITS
            elif kind == EFFECT_SITE and ke0[i] == 0.0:
                status[i] = NO_EFFECT_SITE
        touched[i] = False
        if status[i] != FINE:
            shares[i, :] = math.nan
            extremes[i, :] = math.nan
            continue
        _one_window(kind, i, start[i], end[i], low[i], high[i], cuts, roots, tally,
                    time, bolus, rate, rates, weights, ke0)  # fmt: skip
        whole = tally[0] + tally[1] + tally[2]
        for c in range(3):
            shares[i, c] = tally[c] / whole
        extremes[i, 0], extremes[i, 1], extremes[i, 2] = tally[3], tally[4], tally[6]
        extremes[i, 3], extremes[i, 4] = tally[7], tally[8]
        touched[i] = tally[5] > 0.0


@_compiled
def areas(rates, weights, ke0, time, bolus, rate, start, end, status, area):
    """Area under plasma from start to end, in closed form: nonnegative terms only."""
    for i in range(start.size):
        if status[i] == FINE:
            if not (math.isfinite(start[i]) and math.isfinite(end[i]) and start[i] <= end[i]):
                status[i] = BAD_WINDOW
        if status[i] != FINE:
            area[i] = math.nan
            continue
        state, flow, event = _reached(i, start[i], time, bolus, rate, rates, weights, ke0)
        now, total = start[i], 0.0
        while now < end[i]:
            until = min(end[i], time[i, event]) if event < time.shape[1] else end[i]
            h = until - now
            for c in range(3):
                z = rates[i, c] * h
                total += state[c] * h * _mean_exponential(z)
                total += flow * weights[i, c] * h * h * _second_difference(0.0, z)
            if until < end[i]:
                state, flow, event = _met(i, state, flow, event, now, until, time, bolus, rate, rates, weights, ke0)
            now = until
        area[i] = total


# ---- counts ----


@_compiled
def tally(values, bits, low, high, members, counts, bins):
    """Add every value to the counts (below, in, above) and bins of the groups its patient belongs to.

    `bits` is `values` seen as int64: exponent and first 7 bits of the mantissa are the bin. NaN is passed over.
    """
    shift = 52 - BINS_PER_OCTAVE_LOG2
    lowest = (1023 + LOWEST_OCTAVE) << BINS_PER_OCTAVE_LOG2
    for first in range(0, values.shape[1], 8):  # one cache line of a patient's values at a time
        last = min(first + 8, values.shape[1])
        for i in range(values.shape[0]):
            for t in range(first, last):
                value = values[i, t]
                if value != value:
                    continue
                place = (bits[i, t] >> shift) - lowest + FIRST_BIN
                if value < 0.0:
                    place = NEGATIVE_BIN
                elif value == 0.0:
                    place = ZERO_BIN
                elif place < FIRST_BIN:
                    place = UNDER_BIN
                elif place > OVER_BIN:
                    place = OVER_BIN
                zone = 0 if value < low[i] else (2 if value > high[i] else 1)
                for g in range(members.shape[1]):
                    if members[i, g]:
                        counts[g, t, zone] += 1
                        bins[g, t, place] += 1
