"""All compiled code: float64 and int64 arrays and scalars in, nothing of ours imported.

Plasma is a sum of modes that fall off at the hybrid rates of a mammillary model; the effect site follows plasma at
ke0. Between events everything is known in closed form. The effect site is never a difference of exponentials: each
step adds nonnegative terms only, so nothing cancels when ke0 meets a hybrid rate or when rates lie decades apart.
Kernels never raise: a patient that cannot be computed carries a status code (worded in solve.py).

A patient's drug is one row of eight numbers: three hybrid rates, three weights, ke0, ka. What is given is one row an
event: time, bolus and dose into the depot then, rate of infusion from then on. A state is plasma's three modes, the
effect site (mg/L) and the depot (mg).
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
NO_ABSORPTION = 8

EPSILON = 2.220446049250313e-16
LANE = 32  # patients that step together
MOST_STEPS = 200  # of any root search; halving alone ends well before
PATIENT_STEPS = 8  # of it, in which Newton's method need not get faster

KE0, KA = 6, 7  # in a patient's row, after rates 0 to 2 and weights 3 to 5
TIME, BOLUS, ORAL, FLOW = 0, 1, 2, 3  # in an event's row
PLASMA, EFFECT_SITE, EFFECT = 0, 1, 2  # courses
THREE_TERMS, SLOPE, BEHIND = 3, 4, 5  # further functions of time that roots are sought of

SERIES_TERMS = 20
INVERSE_FACTORIALS = tuple(1.0 / math.factorial(n) for n in range(SERIES_TERMS + 3))

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
def _parameter_status(v1, cl, v2, q2, v3, q3, ke0, ka, bioavailability, lag):
    """FINE, NOT_FINITE or NOT_POSITIVE."""
    total = v1 + cl + v2 + q2 + v3 + q3 + ke0 + ka + bioavailability + lag
    if not math.isfinite(total):
        return NOT_FINITE
    if v1 <= 0.0 or cl <= 0.0 or v2 <= 0.0 or v3 <= 0.0 or q2 < 0.0 or q3 < 0.0 or ke0 < 0.0:
        return NOT_POSITIVE
    if ka < 0.0 or bioavailability <= 0.0 or lag < 0.0:
        return NOT_POSITIVE
    return FINE


@_compiled
def disposition(v1, cl, v2, q2, v3, q3, ke0, ka, bioavailability, lag, rates, weights, status):
    """Hybrid rates and weights of every patient. A compartment with Q = 0 is absent.

    The rates solve CL/x = V1 + Q2/(k21 - x) + Q3/(k31 - x), each found as an offset from its nearest pole so that
    close roots and poles keep their distance; the weight is 1/(V1 + sum of Q k/(k - x)^2), all terms positive.
    """
    poles, residues = np.empty(3), np.empty(3)
    for i in range(v1.size):
        rates[i, :] = 1.0
        weights[i, :] = 0.0
        status[i] = _parameter_status(v1[i], cl[i], v2[i], q2[i], v3[i], q3[i], ke0[i], ka[i],
                                      bioavailability[i], lag[i])  # fmt: skip
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


# ---- divided differences of exp(-s): what a cascade of first-order steps is made of ----


@_compiled
def _mean_exponential(z):
    """(1 - exp(-z))/z: the mean of exp(-s) for s from 0 to z."""
    return -math.expm1(-z) / z if z != 0.0 else 1.0


@_compiled
def _mean_of(z, exponential):
    """The same where exp(-z) is known already."""
    return (1.0 - exponential) / z if z >= 1.0 else _mean_exponential(z)


@_compiled
def _passed_of(apart, exponential_a, exponential_b):
    """First divided difference of exp(-s) at two points that lie `apart`, from both exponentials; never negative."""
    nearer = max(exponential_a, exponential_b)
    if apart >= 1.0:
        return (nearer - min(exponential_a, exponential_b)) / apart
    return nearer * _mean_exponential(apart)


@_compiled
def _second_series(a, b):
    """Second divided difference of exp(-s) at 0, a, b, all at most 1: homogeneous polynomials over factorials."""
    power, homogeneous, total = 1.0, 1.0, 0.5
    for n in range(1, SERIES_TERMS):
        power *= -a
        homogeneous = power - b * homogeneous
        term = homogeneous * INVERSE_FACTORIALS[n + 2]
        total += term
        if abs(term) < 1e-18:
            break
    return total


@_compiled
def _second_difference(a, b):
    """Second divided difference of exp(-s) at 0, a, b >= 0: positive, at worst a factor of 3 lost in rounding."""
    if a > b:
        a, b = b, a
    if b < 1.0:
        return _second_series(a, b)
    return (_mean_exponential(a) - math.exp(-a) * _mean_exponential(b - a)) / b


@_compiled
def _second_of_three(a, b, c, h):
    """Second divided difference of exp(-s) at a h, b h, c h."""
    least, most = min(a, b, c), max(a, b, c)
    middle = max(min(a, b), min(max(a, b), c))
    return math.exp(-least * h) * _second_difference((middle - least) * h, (most - least) * h)


@_compiled
def _third_difference(a, b, c):
    """Minus the third divided difference of exp(-s) at 0, a, b, c >= 0: positive; a factor of 20 may be lost."""
    least, most = min(a, b, c), max(a, b, c)
    middle = max(min(a, b), min(max(a, b), c))
    if most >= 1.0:
        return (_second_difference(least, middle) - _second_of_three(least, middle, most, 1.0)) / most
    first, second, third, total = 1.0, 1.0, 1.0, INVERSE_FACTORIALS[3]
    for n in range(1, SERIES_TERMS):
        first *= -least
        second = first - middle * second
        third = second - most * third
        term = third * INVERSE_FACTORIALS[n + 3]
        total += term
        if abs(term) < 1e-18:
            break
    return total


# ---- steps ----


@_compiled
def _mode(rate, weight, ke0, keep_site, h, infused):
    """What a step of h does with one mode of plasma: keeps, infuses, passes on to the effect site, and what an
    infusion brings there."""
    z, k = rate * h, ke0 * h
    keep = math.exp(-z)
    infuse, passed, arrived = 0.0, 0.0, 0.0
    if weight > 0.0:
        if ke0 > 0.0:
            passed = _passed_of(abs(rate - ke0) * h, keep, keep_site)
        if infused:
            mean = _mean_of(z, keep)
            infuse = weight * h * mean
            if k >= 1.0 or (z >= 1.0 and k > 0.0):
                slower = mean if z <= k else _mean_of(k, keep_site)
                arrived = weight * ((slower - passed) / max(z, k)) * (k * h)
            elif k > 0.0:
                arrived = weight * _second_series(min(z, k), max(z, k)) * (k * h)
    return keep, infuse, k * passed, arrived


@_compiled
def _factors(drug, ke0, h, infused, absorbed):
    """What a step of length h does: three factors that keep plasma's modes, three that infuse, three from plasma to
    the effect site, one that keeps the effect site, one that infuses it; four from the depot to modes and effect
    site, one that keeps the depot. ke0 is 0 where the effect site does not matter."""
    keep_site = math.exp(-ke0 * h)
    keep1, infuse1, pass1, arrived1 = _mode(drug[0], drug[3], ke0, keep_site, h, infused)
    keep2, infuse2, pass2, arrived2 = _mode(drug[1], drug[4], ke0, keep_site, h, infused)
    keep3, infuse3, pass3, arrived3 = _mode(drug[2], drug[5], ke0, keep_site, h, infused)
    arrived = arrived1 + arrived2 + arrived3
    absorb1, absorb2, absorb3, absorb_site, keep_depot = 0.0, 0.0, 0.0, 0.0, 1.0
    if absorbed:
        a = drug[KA] * h
        keep_depot = math.exp(-a)
        absorb1 = a * drug[3] * _passed_of(abs(drug[KA] - drug[0]) * h, keep_depot, keep1)
        absorb2 = a * drug[4] * _passed_of(abs(drug[KA] - drug[1]) * h, keep_depot, keep2)
        absorb3 = a * drug[5] * _passed_of(abs(drug[KA] - drug[2]) * h, keep_depot, keep3)
        if ke0 > 0.0:
            for i in range(3):
                if drug[3 + i] > 0.0:
                    absorb_site += drug[3 + i] * _second_of_three(drug[KA], drug[i], ke0, h)
            absorb_site *= a * (ke0 * h)
    return (
        keep1, keep2, keep3, infuse1, infuse2, infuse3, pass1, pass2, pass3, keep_site, arrived,
        absorb1, absorb2, absorb3, absorb_site, keep_depot,
    )  # fmt: skip


@_compiled
def _moved(state, rate, f):
    """State after the step whose factors are f, under a constant rate: nonnegative terms only."""
    x1, x2, x3, site, depot = state
    return (
        x1 * f[0] + rate * f[3] + depot * f[11],
        x2 * f[1] + rate * f[4] + depot * f[12],
        x3 * f[2] + rate * f[5] + depot * f[13],
        site * f[9] + (x1 * f[6] + x2 * f[7] + x3 * f[8]) + rate * f[10] + depot * f[14],
        depot * f[15],
    )


@_compiled
def _after(state, rate, drug, ke0, h):
    """State after h minutes."""
    return _moved(state, rate, _factors(drug, ke0, h, rate > 0.0, state[4] > 0.0))


@_compiled
def check_events(events, ka, interval, status):
    """Set BAD_EVENT for patients whose events are not ascending, or not finite, or whose doses are negative, or whose
    regimen repeats after no time or begins before 0; NO_ABSORPTION for doses by mouth without ka."""
    for i in range(events.shape[0]):
        if status[i] != FINE:
            continue
        repeats = interval[i] != math.inf
        previous = 0.0 if repeats else -math.inf
        if repeats and not 0.0 < interval[i] < math.inf:
            status[i] = BAD_EVENT
        for j in range(events.shape[1]):
            at, bolus, oral, rate = events[i, j, TIME], events[i, j, BOLUS], events[i, j, ORAL], events[i, j, FLOW]
            if not at >= previous or at == -math.inf:
                status[i] = BAD_EVENT
            elif at < math.inf:
                if not (0.0 <= bolus < math.inf and 0.0 <= oral < math.inf and 0.0 <= rate < math.inf):
                    status[i] = BAD_EVENT
                elif oral > 0.0 and ka[i] == 0.0 and status[i] == FINE:
                    status[i] = NO_ABSORPTION
            previous = at


@_compiled
def _met(state, flow, event, begin, end, given, drug):
    """State, rate and number of events at `end`, after doses at that time, from `begin`."""
    now = begin
    while event < given.shape[0] and given[event, TIME] <= end:
        if given[event, TIME] > now:
            state = _after(state, flow, drug, drug[KE0], given[event, TIME] - now)
            now = given[event, TIME]
        x1, x2, x3, site, depot = state
        dose = given[event, BOLUS]
        state = x1 + dose * drug[3], x2 + dose * drug[4], x3 + dose * drug[5], site, depot + given[event, ORAL]
        flow = given[event, FLOW]
        event += 1
    if now < end:
        state = _after(state, flow, drug, drug[KE0], end - now)
    return state, flow, event


@_compiled
def _reached(start, end, given, drug):
    """The same from the state at time 0, just before the events at that time, or from nothing before the first."""
    begin = min(given[0, TIME], end) if given.shape[0] > 0 else end
    if start[0] + start[1] + start[2] + start[3] + start[4] > 0.0:
        begin = 0.0
    return _met((start[0], start[1], start[2], start[3], start[4]), 0.0, 0, begin, end, given, drug)


@_compiled
def steady_starts(drug, events, interval, status, start):
    """The state at time 0 of a regimen repeated for ever, whose events of one interval these are.

    What one interval leaves of nothing, b, and of a state x, M x, are known in closed form; x = M x + b is solved
    from the depot down to the effect site, each a geometric sum, all terms nonnegative. Zero where nothing repeats.
    """
    for i in range(interval.size):
        start[i, :] = 0.0
        if status[i] != FINE or interval[i] == math.inf:
            continue
        row, h = drug[i], interval[i]
        left, _, _ = _met((0.0, 0.0, 0.0, 0.0, 0.0), 0.0, 0, 0.0, h, events[i], row)
        f = _factors(row, row[KE0], h, False, row[KA] > 0.0)
        if row[KA] > 0.0:
            start[i, 4] = left[4] / -math.expm1(-row[KA] * h)
        depot = start[i, 4]
        site = left[3] + depot * f[14]
        for c in range(3):
            start[i, c] = (left[c] + depot * f[11 + c]) / -math.expm1(-row[c] * h)
            site += start[i, c] * f[6 + c]
        if row[KE0] > 0.0:
            start[i, 3] = site / -math.expm1(-row[KE0] * h)
        for c in range(5):
            if not start[i, c] < math.inf:
                status[i] = OUT_OF_REACH


# ---- lanes: patients that step through the grid together ----


@_compiled
def _lane_loaded(s, table, step):
    """Set the factors of a lane's step; those that infuse times the rate, once and not at every step."""
    for q in range(16 * LANE):
        s[8 * LANE + q] = table[step, q]
    for p in range(LANE):
        rate = s[4 * LANE + p]
        s[11 * LANE + p] *= rate
        s[12 * LANE + p] *= rate
        s[13 * LANE + p] *= rate
        s[18 * LANE + p] *= rate


@_compiled
def _lane_moved(s):
    """One grid step for all patients of a lane. Rows of the flat scratch `s`, LANE numbers each, at constant offsets
    so that the compiler vectorises: 0-2 modes, 3 depot, 4 rate, 5 plasma, 6 effect site, 7 effect, 8-23 factors, 24-30
    the first seven before the step."""
    for p in range(LANE):
        x1, x2, x3 = s[p], s[LANE + p], s[2 * LANE + p]
        passed = x1 * s[14 * LANE + p] + x2 * s[15 * LANE + p] + x3 * s[16 * LANE + p]
        s[6 * LANE + p] = s[6 * LANE + p] * s[17 * LANE + p] + passed + s[18 * LANE + p]
        s[p] = x1 * s[8 * LANE + p] + s[11 * LANE + p]
        s[LANE + p] = x2 * s[9 * LANE + p] + s[12 * LANE + p]
        s[2 * LANE + p] = x3 * s[10 * LANE + p] + s[13 * LANE + p]


@_compiled
def _lane_absorbed(s):
    """What the depots of a lane add to that step."""
    for p in range(LANE):
        depot = s[3 * LANE + p]
        s[p] += depot * s[19 * LANE + p]
        s[LANE + p] += depot * s[20 * LANE + p]
        s[2 * LANE + p] += depot * s[21 * LANE + p]
        s[6 * LANE + p] += depot * s[22 * LANE + p]
        s[3 * LANE + p] = depot * s[23 * LANE + p]


@_compiled
def _lane_plasma(s):
    """The sum of the modes."""
    for p in range(LANE):
        s[5 * LANE + p] = s[p] + s[LANE + p] + s[2 * LANE + p]


@_compiled
def _lane_state(s, p):
    return s[p], s[LANE + p], s[2 * LANE + p], s[6 * LANE + p], s[3 * LANE + p]


@_compiled
def _lane_set(s, p, state, flow):
    x1, x2, x3, site, depot = state
    s[p], s[LANE + p], s[2 * LANE + p], s[6 * LANE + p], s[3 * LANE + p] = x1, x2, x3, site, depot
    s[4 * LANE + p] = flow


@_compiled
def _by_mouth(events, start):
    """Whether any depot is ever filled."""
    for i in range(events.shape[0]):
        if start[i, 4] > 0.0:
            return True
        for j in range(events.shape[1]):
            if events[i, j, ORAL] > 0.0:
                return True
    return False


@_compiled
def _lane_begun(first, width, s, table, upcoming, event, drug, status, events, start, at, lengths, oral):
    """Set a lane's scratch, table of factors and next events for the first time of the grid."""
    s[:], table[:], upcoming[:] = 0.0, 0.0, math.inf
    for p in range(width):
        i = first + p
        if status[i] != FINE:
            continue
        for c in range(lengths.size):
            f = _factors(drug[i], drug[i, KE0], lengths[c], True, oral and drug[i, KA] > 0.0)
            for r in range(16):
                table[c, r * LANE + p] = f[r]
        state, flow, event[p] = _reached(start[i], at, events[i], drug[i])
        _lane_set(s, p, state, flow)
        if event[p] < events.shape[1]:
            upcoming[p] = events[i, event[p], TIME]


@_compiled
def _lane_met(first, width, s, upcoming, event, since, until, drug, events):
    """Walk alone, from `since` to `until`, the patients of a lane whose events lie between; returns the next event."""
    before = s[24 * LANE :]
    for p in range(width):
        if upcoming[p] > until:
            continue
        i, begin, state = first + p, until, _lane_state(s, p)
        if upcoming[p] < until:
            begin, state = since, _lane_state(before, p)
        state, flow, event[p] = _met(state, s[4 * LANE + p], event[p], begin, until, events[i], drug[i])
        _lane_set(s, p, state, flow)
        upcoming[p] = events[i, event[p], TIME] if event[p] < events.shape[1] else math.inf
    return upcoming.min()


@_compiled
def _lane_members(first, width, status, low, high, members, limits, words, who, whose):
    """Set a lane's limits, its members as bytes of words, and as pairs of patient and group; how many pairs."""
    limits[:], words[:], pairs = 0.0, 0, 0
    for p in range(width):
        limits[p], limits[LANE + p] = low[first + p], high[first + p]
        for g in range(members.shape[1]):
            if members[first + p, g] and status[first + p] == FINE:
                words[g // 8 * LANE + p] += 1 << (g % 8 * 8)
                who[pairs], whose[pairs] = p, g
                pairs += 1
    return pairs


@_compiled
def _effect(concentration, curve, i):
    """Sigmoid effect; curve: baseline, effect at infinity, half, steepness below and above half (effect.py)."""
    ratio = concentration / curve[i, 2]
    r = ratio ** (curve[i, 4] if ratio > 1.0 else curve[i, 3])
    share = 1.0 if r == math.inf else r / (1.0 + r)
    return curve[i, 0] + (curve[i, 1] - curve[i, 0]) * share


@_compiled
def _lane_counted(s, row, limits, words, w):
    """Members below, in and above the range: eight groups at once, a byte each of a word."""
    below, above, there = 0, 0, 0
    for p in range(LANE):
        value, word = s[row * LANE + p], words[w * LANE + p]
        below += word if value < limits[p] else 0
        above += word if value > limits[LANE + p] else 0
        there += word if value == value else 0
    return below, there - below - above, above


@_compiled
def _unpacked(packed, counts):
    """Move what stands in the bytes of `packed` to the counts of each group."""
    for g in range(counts.shape[0]):
        for t in range(counts.shape[1]):
            for zone in range(3):
                counts[g, t, zone] += (packed[g // 8, t, zone] >> (g % 8 * 8)) & 255
    packed[:] = 0


@_compiled
def _lane_binned(s, bits, row, bins_at):
    """Each value's bin: `bits` is `s` seen as int64; exponent and first 7 bits of the mantissa. -1 for NaN."""
    lowest = ((1023 + LOWEST_OCTAVE) << BINS_PER_OCTAVE_LOG2) - FIRST_BIN
    for p in range(LANE):
        value = s[row * LANE + p]
        at = (bits[row * LANE + p] >> (52 - BINS_PER_OCTAVE_LOG2)) - lowest
        at = max(UNDER_BIN, min(at, OVER_BIN))
        at = ZERO_BIN if value == 0.0 else at
        at = NEGATIVE_BIN if value < 0.0 else at
        bins_at[p] = at if value == value else -1


@_compiled
def on_grid(kind, drug, status, events, start, grid, length_of, lengths, curve, low, high, members, counts, bins,
            plasma, effect_site):  # fmt: skip
    """Walk every patient through the grid; values are those just after doses at that time.

    length_of[t] is the index in `lengths` of the step from grid[t] to grid[t + 1]. Patients go in lanes of LANE: time
    is the outer loop, patients the inner one; only a patient whose event falls inside a step walks it alone. Each of
    these may be empty: `counts` (below, in, above) and `bins` of the groups a patient belongs to, added to from the
    course `kind`; `plasma` and `effect_site`, the courses kept. Patients with a status are passed over (kept: NaN);
    NaN values are not counted.
    """
    s, table = np.empty(31 * LANE), np.empty((lengths.size, 16 * LANE))
    upcoming, event, oral = np.empty(LANE), np.empty(LANE, np.int64), _by_mouth(events, start)
    groups, bits, row = members.shape[1], s.view(np.int64), 5 + kind
    limits, words = np.empty(2 * LANE), np.empty((groups + 7) // 8 * LANE, np.int64)
    packed, lanes = np.zeros(((groups + 7) // 8, grid.size, 3), np.int64), 0
    who, whose, bins_at = np.empty(groups * LANE, np.int64), np.empty(groups * LANE, np.int64), np.empty(LANE, np.int64)
    for first in range(0, status.size, LANE):
        width = min(LANE, status.size - first)
        _lane_begun(first, width, s, table, upcoming, event, drug, status, events, start, grid[0], lengths, oral)
        belonging = _lane_members(first, width, status, low, high, members, limits, words, who, whose)
        loaded, earliest = -1, upcoming.min()
        for t in range(grid.size):
            if t > 0:
                if length_of[t - 1] != loaded:
                    loaded = length_of[t - 1]
                    _lane_loaded(s, table, loaded)
                eventful = earliest <= grid[t]
                if eventful:
                    s[24 * LANE :] = s[: 7 * LANE]
                _lane_moved(s)
                if oral:
                    _lane_absorbed(s)
                if eventful:
                    earliest = _lane_met(first, width, s, upcoming, event, grid[t - 1], grid[t], drug, events)
                    _lane_loaded(s, table, loaded)
            if kind == PLASMA:
                _lane_plasma(s)
            if kind == EFFECT:
                for p in range(width):
                    s[7 * LANE + p] = _effect(s[6 * LANE + p], curve, first + p)
            for w in range(packed.shape[0]):
                below, inside, above = _lane_counted(s, row, limits, words, w)
                packed[w, t, 0] += below
                packed[w, t, 1] += inside
                packed[w, t, 2] += above
            if bins.shape[2] > 0:
                _lane_binned(s, bits, row, bins_at)
                for m in range(belonging):
                    if bins_at[who[m]] >= 0:
                        bins[whose[m], t, bins_at[who[m]]] += 1
            if plasma.shape[1] > 0:
                for p in range(width):
                    plasma[first + p, t] = s[5 * LANE + p] if status[first + p] == FINE else math.nan
                    effect_site[first + p, t] = s[6 * LANE + p] if status[first + p] == FINE else math.nan
        lanes += 1
        if (lanes + 1) * LANE > 255:  # a byte holds no more
            _unpacked(packed, counts)
            lanes = 0
    _unpacked(packed, counts)


# ---- exact windows ----


@_compiled
def _slopes(state, rate, drug):
    """What turning points hang on.

    d: plasma's slope now, mode by mode; plasma less effect site; the slowest rate at work, by which all are scaled
    lest they vanish; ka^2 times the depot; c: with a depot, the three terms of (d/dt + ka) of plasma's slope (the
    depot's own term drops out), else d.
    """
    x1, x2, x3, site, depot = state
    ka = drug[KA]
    flow = rate + ka * depot
    d1, d2, d3 = drug[3] * flow - drug[0] * x1, drug[4] * flow - drug[1] * x2, drug[5] * flow - drug[2] * x3
    fed = ka * ka * depot
    slowest = math.inf
    if d1 != 0.0:
        slowest = drug[0]
    if d2 != 0.0:
        slowest = min(slowest, drug[1])
    if d3 != 0.0:
        slowest = min(slowest, drug[2])
    c1, c2, c3 = d1, d2, d3
    if fed > 0.0:
        for i in range(3):
            if drug[3 + i] > 0.0:
                slowest = min(slowest, drug[i])
        slowest = min(slowest, ka)
        c1 = (ka - drug[0]) * (drug[3] * rate - drug[0] * x1) - drug[3] * (ka * drug[0]) * depot
        c2 = (ka - drug[1]) * (drug[4] * rate - drug[1] * x2) - drug[4] * (ka * drug[1]) * depot
        c3 = (ka - drug[2]) * (drug[5] * rate - drug[2] * x3) - drug[5] * (ka * drug[2]) * depot
    if slowest == math.inf:
        slowest = drug[KE0]
    return d1, d2, d3, x1 + x2 + x3 - site, slowest, fed, c1, c2, c3


@_compiled
def _seen(kind, state, rate, drug):
    """Plasma or effect site in a state, and its slope."""
    x1, x2, x3, site, depot = state
    if kind == EFFECT_SITE:
        return site, drug[KE0] * (x1 + x2 + x3 - site)
    flow = rate + drug[KA] * depot
    falls = drug[0] * x1 + drug[1] * x2 + drug[2] * x3
    return x1 + x2 + x3, (drug[3] + drug[4] + drug[5]) * flow - falls


@_compiled
def _function(kind, t, state, rate, slopes, drug):
    """A function of time, t minutes on, and its slope: plasma or effect site; or, times a positive factor, plasma's
    slope, the three terms before it, or plasma less effect site.

    Of these last the slope is that of the function times the growing exponential under which it turns where the one
    before it is zero; both are scaled alike.
    """
    if kind <= EFFECT_SITE:
        return _seen(kind, _after(state, rate, drug, drug[KE0] if kind == EFFECT_SITE else 0.0, t), rate, drug)
    ka, ke0, fed = drug[KA], drug[KE0], slopes[5]
    slowest = min(slopes[4], ke0) if kind == BEHIND else slopes[4]
    left_depot, left_site = 0.0, 0.0
    if fed > 0.0:
        left_depot = math.exp(-(ka - slowest) * t)
    if kind == BEHIND:
        left_site = math.exp(-(ke0 - slowest) * t)
    terms, turning, slope, behind = 0.0, 0.0, 0.0, slopes[3] * left_site
    for i in range(3):
        if slopes[i] == 0.0 and (fed == 0.0 or drug[3 + i] == 0.0):
            continue
        left = math.exp(-(drug[i] - slowest) * t)
        terms += slopes[6 + i] * left
        turning += (slowest - drug[i]) * slopes[6 + i] * left
        slope += slopes[i] * left
        if fed > 0.0 and kind > THREE_TERMS:
            slope -= fed * t * drug[3 + i] * _passed_of(abs(drug[i] - ka) * t, left, left_depot)
        if kind == BEHIND:
            behind += slopes[i] * t * _passed_of(abs(drug[i] - ke0) * t, left, left_site)
            if fed > 0.0:
                twice = _second_of_three(drug[i] - slowest, ka - slowest, ke0 - slowest, t)
                behind -= fed * t * drug[3 + i] * t * twice
    if kind == THREE_TERMS:
        return terms, turning
    if kind == SLOPE:
        return slope, terms + (slowest - ka) * slope
    return behind, slope + (slowest - ke0) * behind


@_compiled
def _root(kind, level, a, b, fa, fb, slope_a, slope_b, state, rate, slopes, drug):
    """Where the function passes `level` between a and b, where it lies on either side (fa, fb: less the level; slopes).

    Newton's method from an end whose tangent stays between them, of the logarithm where a course falls, kept inside a
    bracket and else halving it.
    """
    if fa == 0.0:
        return a
    if fb == 0.0:
        return b
    logarithmic = kind <= EFFECT_SITE and fa > 0.0 and level > 0.0 and level + fb > 0.0
    off_a, off_b = fa, fb
    if logarithmic:
        off_a, off_b = (level + fa) * math.log1p(fa / level), (level + fb) * math.log1p(fb / level)
    x = a - off_a / slope_a
    if not a < x < b:
        x = b - off_b / slope_b
        if not a < x < b:
            x = a + (b - a) * (fa / (fa - fb))
    moved, steps, high_at_a = b - a, 0, fa > 0.0
    for tried in range(MOST_STEPS):
        value, slope = _function(kind, x, state, rate, slopes, drug)
        off = value - level
        if off == 0.0:
            return x
        if (off > 0.0) == high_at_a:
            a = x
        else:
            b = x
        if logarithmic and value > 0.0:
            off = value * math.log1p(off / level)
        following = x - off / slope
        step = abs(following - x)
        if a <= following <= b and (step <= 0.5 * moved or tried < PATIENT_STEPS):
            steps += 1
        else:
            following, steps = a + 0.5 * (b - a), 0
            step = abs(following - x)
        # two steps of Newton in a row show how fast they shrink, and so what is left
        if steps > 1 and step * (step / moved) * (step / moved) <= EPSILON * following:
            return following
        if b - a <= EPSILON * b:
            return following
        x, moved = following, step
    return x


@_compiled
def _opposite(fa, fb):
    return (fa < 0.0 and fb > 0.0) or (fa > 0.0 and fb < 0.0)


@_compiled
def _between(kind, cuts, count, roots, state, rate, slopes, drug):
    """Sign changes of the function between neighbouring cuts, written to `roots`; returns how many."""
    found = 0
    fa, slope_a = _function(kind, cuts[0], state, rate, slopes, drug)
    for j in range(1, count):
        fb, slope_b = _function(kind, cuts[j], state, rate, slopes, drug)
        if _opposite(fa, fb):
            roots[found] = _root(kind, 0.0, cuts[j - 1], cuts[j], fa, fb, slope_a, slope_b,
                                 state, rate, slopes, drug)  # fmt: skip
            found += 1
        fa, slope_a = fb, slope_b
    return found


@_compiled
def _monotone_cuts(kind, length, cuts, roots, state, rate, slopes, drug):
    """Write 0, the turning points of the course, and `length` to `cuts`; return how many.

    A function times a growing exponential turns where a simpler one is zero, which separates its own zeros: three
    terms (they turn at most once, at a moment known in closed form); with a depot, plasma's slope times exp(ka t);
    then exp(ke0 t) (plasma - effect site), whose zeros are the effect site's turning points.
    """
    cuts[0] = 0.0
    count = 1
    second, third = (drug[1] - drug[0]) * slopes[7], (drug[2] - drug[0]) * slopes[8]
    if _opposite(second, third) and drug[2] != drug[1]:
        turn = (math.log(abs(third)) - math.log(abs(second))) / (drug[2] - drug[1])
        if 0.0 < turn < length:
            cuts[1] = turn
            count = 2
    cuts[count] = length
    for sought in range(THREE_TERMS, BEHIND + 1):
        if (sought == SLOPE and slopes[5] == 0.0) or (sought == BEHIND and kind == PLASMA):
            continue
        found = _between(sought, cuts, count + 1, roots, state, rate, slopes, drug)
        for j in range(found):
            cuts[1 + j] = roots[j]
        count = 1 + found
        cuts[count] = length
    return count + 1


@_compiled
def _passage(kind, level, a, b, ya, yb, slope_a, slope_b, state, rate, slopes, drug):
    """When a course that is monotone from ya at a to yb at b passes the level; a or b where it lies on one side."""
    if math.isinf(level) or not _opposite(ya - level, yb - level):
        rising_over = yb > ya and ya >= level
        falling_under = yb <= ya and ya <= level
        return a if rising_over or falling_under else b
    return _root(kind, level, a, b, ya - level, yb - level, slope_a, slope_b, state, rate, slopes, drug)


@_compiled
def _interval(kind, now, length, low, high, cuts, roots, tally, state, after, rate, drug):
    """Add an interval from `now`, between two states, to a window's tally: 0-2 minutes below, in, above; 3, 4 lowest
    and highest value, 5, 6 when; 7 the last value; 8 when first in range; 9 when last above it."""
    slopes = _slopes(state, rate, drug)
    count = _monotone_cuts(kind, length, cuts, roots, state, rate, slopes, drug)
    a = cuts[0]
    ya, slope_a = _seen(kind, state, rate, drug)
    for j in range(1, count):
        b = cuts[j]
        if j == count - 1:
            yb, slope_b = _seen(kind, after, rate, drug)
        else:
            yb, slope_b = _function(kind, b, state, rate, slopes, drug)
        least, most = min(ya, yb), max(ya, yb)
        rising = yb > ya
        at_low, at_high = a, a
        if low <= least and most <= high:
            tally[1] += b - a
        elif most < low:
            tally[0] += b - a
        elif least > high:
            tally[2] += b - a
            at_high = b
        else:
            at_low = _passage(kind, low, a, b, ya, yb, slope_a, slope_b, state, rate, slopes, drug)
            at_high = _passage(kind, high, a, b, ya, yb, slope_a, slope_b, state, rate, slopes, drug)
            tally[0] += (at_low - a) if rising else (b - at_low)
            tally[1] += abs(at_high - at_low)
            tally[2] += (b - at_high) if rising else (at_high - a)
        if least < tally[3]:
            tally[3], tally[5] = least, now + (a if rising else b)
        if most > tally[4]:
            tally[4], tally[6] = most, now + (b if rising else a)
        if least <= high and most >= low:
            tally[8] = min(tally[8], now + (at_low if rising else at_high))
        if most > high:
            tally[9] = now + (b if rising else at_high)
        tally[7] = yb
        a, ya, slope_a = b, yb, slope_b


@_compiled
def _one_window(kind, begin, end, low, high, cuts, roots, tally, given, start, drug):
    """Walk one patient's window from event to event."""
    tally[:] = 0.0
    tally[3], tally[4], tally[8], tally[9] = math.inf, -math.inf, math.inf, -math.inf
    state, flow, event = _reached(start, begin, given, drug)
    if begin == end:
        value, _ = _seen(kind, state, flow, drug)
        zone = 0 if value < low else (2 if value > high else 1)
        tally[zone] = 1.0
        tally[3], tally[4], tally[5], tally[6], tally[7] = value, value, begin, begin, value
        tally[8] = begin if zone == 1 else math.inf
        tally[9] = begin if zone == 2 else -math.inf
    now = begin
    while now < end:
        until = min(end, given[event, TIME]) if event < given.shape[0] else end
        after = _after(state, flow, drug, drug[KE0], until - now)
        _interval(kind, now, until - now, low, high, cuts, roots, tally, state, after, flow, drug)
        if until < end:
            state, flow, event = _met(after, flow, event, until, until, given, drug)
        now = until


@_compiled
def _window_status(kind, begin, end, interval, drug):
    """FINE, BAD_WINDOW or NO_EFFECT_SITE."""
    if not (math.isfinite(begin) and math.isfinite(end) and begin <= end):
        return BAD_WINDOW
    if interval != math.inf and not (begin >= 0.0 and end <= interval):
        return BAD_WINDOW
    if kind == EFFECT_SITE and drug[KE0] == 0.0:
        return NO_EFFECT_SITE
    return FINE


@_compiled
def windows(kind, drug, events, start, interval, low, high, begin, end, status, shares, found):
    """Shares below, in and above the range of each window; found: lowest, highest, when each, value at the end, when
    first in range (inf: never), when last above (-inf: never)."""
    cuts, roots, tally = np.empty(6), np.empty(4), np.empty(10)
    for i in range(status.size):
        if status[i] == FINE:
            status[i] = _window_status(kind, begin[i], end[i], interval[i], drug[i])
            if status[i] == FINE and not low[i] <= high[i]:
                status[i] = BAD_LIMITS
        if status[i] != FINE:
            shares[i, :] = math.nan
            found[i, :] = math.nan
            continue
        _one_window(kind, begin[i], end[i], low[i], high[i], cuts, roots, tally, events[i], start[i], drug[i])
        whole = tally[0] + tally[1] + tally[2]
        for c in range(3):
            shares[i, c] = tally[c] / whole
        found[i, :] = tally[3:]


@_compiled
def _area(kind, state, rate, drug, h):
    """Area under one course over h minutes: nonnegative terms only."""
    x1, x2, x3, site, depot = state
    ke0, a = drug[KE0], drug[KA] * h
    k, total = ke0 * h, 0.0
    if kind == EFFECT_SITE:
        total = site * h * _mean_exponential(k)
    for i in range(3):
        if drug[3 + i] == 0.0:
            continue
        x, z, volume = (x1, x2, x3)[i], drug[i] * h, drug[3 + i] * h * h
        if kind == PLASMA:
            total += x * h * _mean_exponential(z) + rate * volume * _second_difference(0.0, z)
            if depot > 0.0:
                total += depot * drug[KA] * volume * _second_difference(a, z)
        else:
            total += x * h * k * _second_difference(z, k) + rate * volume * k * _third_difference(0.0, z, k)
            if depot > 0.0:
                total += depot * drug[KA] * volume * k * _third_difference(a, z, k)
    return total


@_compiled
def areas(kind, drug, events, start, interval, begin, end, status, area):
    """Area under plasma or effect site from begin to end, in closed form."""
    for i in range(status.size):
        if status[i] == FINE:
            status[i] = _window_status(kind, begin[i], end[i], interval[i], drug[i])
        if status[i] != FINE:
            area[i] = math.nan
            continue
        state, flow, event = _reached(start[i], begin[i], events[i], drug[i])
        now, total = begin[i], 0.0
        while now < end[i]:
            until = min(end[i], events[i, event, TIME]) if event < events.shape[1] else end[i]
            total += _area(kind, state, flow, drug[i], until - now)
            if until < end[i]:
                state, flow, event = _met(state, flow, event, now, until, events[i], drug[i])
            now = until
        area[i] = total
