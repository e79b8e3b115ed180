"""The choice side: integer scores, and the exponential mechanism over them. Scores never see a row.

The mechanism (base-2 exponential mechanism: Ilvento 2020). Signed feature (j, s) is picked with
probability exactly proportional to 2^(p_j + kappa * u), u = -s * G_j, with kappa = multiplier /
2^shift and p_j the power of j: a public whole number, 0 where no powers are given. Powers are the
same for all data, so they cost no privacy.

A pick is made by rejection (dynamic sampling by weight classes: Matias, Vitter, Ni 2003). Let
L_j = floor(kappa * |G_j|) + p_j be the level of feature j. Propose j with probability proportional
to 2^(B_j + 1) for some B_j >= L_j, propose a fair sign s, and accept with probability
2^(p_j + kappa * u - B_j - 1) <= 1. Given acceptance, (j, s) has probability proportional to
2^(B_j + 1) * 1/2 * 2^(p_j + kappa * u - B_j - 1), that is, to 2^(p_j + kappa * u), whatever the B_j
are. So the bounds B_j decide how many tries a pick takes and nothing else:

* the loud features within WINDOW levels of the top have B_j = L_j: accepted at least 1 time in 4;
* loud features further down share the bound of the window's floor;
* quiet features (so few entries that kappa * |G_j| <= 1) share that bound too and have no kept
  score: it is computed from the column when one is proposed. They are proposed by drawing a feature
  id uniformly and starting again if it turns out to be loud. The bound is never below `lowest`, the
  highest power of the quiet features in the draw, so a score is computed only for the share
  2^(p_j - lowest) of proposals; the rest of the acceptance follows.

Barred features are out of the draw, which is then over the others alone: a barred loud feature is
kept among the lowest, and whenever a barred one is proposed, the try starts again.

Thread safety: one thread at a time per `Scores`.
"""

import numpy as np

from cpython.time cimport perf_counter
from libc.stdint cimport int8_t, int32_t, int64_t, uint8_t, uint16_t, uint64_t
from libc.string cimport memset

from .bits cimport Bits, bernoulli_pow2, bit_source, next_below, next_coin, uint128_t
from .change cimport ScoreChange, score_change, sum_t
from .rows cimport Rows, column_score

cdef enum:
    N_BUCKETS = 2048
    HEADROOM = 1024         # buckets left above the top when the heap is built
    WINDOW = 80             # levels below the top that are weighed exactly

cpdef enum:
    MOST_POWER = 60         # powers lie within [-MOST_POWER, MOST_POWER]

PICKED = 0
NO_BITS = 1


cdef inline int64_t power_of(const score_heap* h, int64_t feature) noexcept nogil:
    return h.powers[feature] if h.powers != NULL else 0


cdef inline int64_t level_of(const score_heap* h, int64_t l, int64_t score) noexcept nogil:
    """floor(kappa * |score|) + p of loud feature l"""
    cdef int64_t size = score if score >= 0 else -score
    return ((h.multiplier * size) >> h.shift) + power_of(h, h.loud[l])


cdef inline bint is_barred(const score_heap* h, int64_t feature) noexcept nogil:
    return h.barred != NULL and h.barred[feature]


cdef inline int32_t bucket_of(const score_heap* h, int64_t l, int64_t score) noexcept nogil:
    """The bucket of loud feature l at a score; N_BUCKETS when it lies above them all."""
    cdef int64_t k = level_of(h, l, score) - h.base + 1
    if k < 0 or is_barred(h, h.loud[l]):
        return 0
    return <int32_t> min(k, <int64_t> N_BUCKETS)


# --- keeping the buckets ---------------------------------------------------------------------

cdef inline void put(score_heap* h, int32_t at, int32_t l) noexcept nogil:
    h.order[at] = l
    h.place[l] = at


cdef void change_bucket(score_heap* h, int32_t l, int32_t to) noexcept nogil:
    """Carry loud feature l from its bucket to `to`, one boundary at a time."""
    cdef int32_t k = h.bucket[l], edge
    h.counters.level_moves += to - k if to > k else k - to
    while k < to:                           # swap with the last of bucket k, which shrinks by it
        edge = h.first[k + 1] - 1
        put(h, h.place[l], h.order[edge])
        put(h, edge, l)
        h.first[k + 1] = edge
        k += 1
    while k > to:                           # swap with the first of bucket k
        edge = h.first[k]
        put(h, h.place[l], h.order[edge])
        put(h, edge, l)
        h.first[k] = edge + 1
        k -= 1
    h.bucket[l] = <uint16_t> to


cdef void settle_top(score_heap* h) noexcept nogil:
    while h.top > 1 and h.first[h.top] == h.first[h.top + 1]:
        h.top -= 1


cdef int64_t highest_level(const score_heap* h, const sum_t* score) noexcept nogil:
    cdef int64_t l, most = h.lowest
    for l in range(h.n_loud):
        if not is_barred(h, h.loud[l]):
            most = max(most, level_of(h, l, score[l]))
    return most


cdef void rebuild(score_heap* h, const sum_t* score) noexcept nogil:
    """Sort the loud features into buckets anew.  O(n_loud + N_BUCKETS)."""
    cdef int64_t l, top_level = highest_level(h, score)
    cdef int32_t k, at = 0, n
    h.counters.rebuilds += 1
    h.base = max(h.lowest, top_level - (N_BUCKETS - HEADROOM) + 2)
    h.top = <int32_t> (top_level - h.base + 1)
    memset(h.first, 0, (N_BUCKETS + 1) * sizeof(int32_t))
    for l in range(h.n_loud):
        k = bucket_of(h, l, score[l])
        h.bucket[l] = <uint16_t> k
        h.first[k] += 1
    for k in range(N_BUCKETS + 1):
        n = h.first[k]
        h.first[k] = at
        at += n
    for l in range(h.n_loud):
        k = h.bucket[l]
        put(h, h.first[k], <int32_t> l)
        h.first[k] += 1
    for k in range(N_BUCKETS, 0, -1):
        h.first[k] = h.first[k - 1]
    h.first[0] = 0
    settle_top(h)


cdef void settle(score_heap* h, const sum_t* score) noexcept nogil:
    """After features have come down: find the top, and keep buckets for the window below it."""
    settle_top(h)
    if h.base > h.lowest and h.top <= WINDOW:
        rebuild(h, score)


cdef void absorb_listed(score_heap* h, score_change* change, sum_t* score,
                        sum_t* sums) noexcept nogil:
    """Add a sparse change, one touched feature at a time."""
    cdef int64_t n
    cdef int32_t l, k
    cdef bint outgrown = False
    for n in range(change.n_touched):
        l = change.touched[n]
        score[l] += sums[l]
        sums[l] = 0
        k = bucket_of(h, l, score[l])
        if k == h.bucket[l]:
            continue
        if k >= N_BUCKETS:
            outgrown = True
            continue
        change_bucket(h, l, k)
        h.top = max(h.top, k)
    if outgrown:
        rebuild(h, score)
    else:
        settle(h, score)


cdef void absorb_all(score_heap* h, sum_t* score, sum_t* sums) noexcept nogil:
    """Add a dense change and rebuild."""
    cdef int64_t l
    for l in range(h.n_loud):
        score[l] += sums[l]
    memset(sums, 0, h.n_loud * sizeof(sum_t))
    rebuild(h, score)


cdef void absorb(score_heap* h, score_change* change, sum_t* score, sum_t* sums) noexcept nogil:
    if change.dense:
        absorb_all(h, score, sums)
    elif change.n_touched:
        absorb_listed(h, change, score, sums)
    change.n_touched = 0
    change.dense = False


cdef void settle_lowest(score_heap* h) noexcept nogil:
    while h.lowest > h.least_power and h.n_quiet[h.lowest + MOST_POWER] == 0:
        h.lowest -= 1


cdef void leave_draw(score_heap* h, int64_t feature, const sum_t* score) noexcept nogil:
    """Put a feature that has just been barred where it weighs least."""
    cdef int64_t l = loud_place(h, feature)
    if l >= 0:
        change_bucket(h, <int32_t> l, 0)
    elif h.powers != NULL:
        h.n_quiet[h.powers[feature] + MOST_POWER] -= 1
        settle_lowest(h)
    settle(h, score)


# --- picking ---------------------------------------------------------------------------------

cdef inline int64_t kept_score(const score_heap* h, int64_t l) noexcept nogil:
    return (<int64_t*> h.score)[l] if h.wide else (<int32_t*> h.score)[l]


cdef int64_t loud_place(const score_heap* h, int64_t feature) noexcept nogil:
    """Where `feature` stands among the loud ones, or -1.  O(log n_loud)."""
    cdef int64_t low = 0, high = h.n_loud, middle
    while low < high:
        middle = (low + high) >> 1
        if h.loud[middle] < feature:
            low = middle + 1
        else:
            high = middle
    return low if low < h.n_loud and h.loud[low] == feature else -1


cdef bint hear(score_heap* h, bit_source* bits, int64_t feature, int64_t* score) noexcept nogil:
    """The score of a quiet feature in the draw, with probability 2^(p - lowest)."""
    if is_barred(h, feature) or loud_place(h, feature) >= 0:
        return False
    if not bernoulli_pow2(bits, h.lowest - power_of(h, feature), 0, 0):
        return False
    score[0] = h.column_score(h.context, feature)
    h.counters.quiet += 1
    return True


cdef bint propose(score_heap* h, bit_source* bits, int64_t* feature, int64_t* score,
                  int64_t* bound) noexcept nogil:
    """Draw a feature with probability proportional to 2^(p + bound + 1); False: start again.

    bound >= floor(kappa * |score|), or kappa * |score| <= bound + 1 for a quiet feature.
    """
    cdef int32_t floor = max(1, h.top - WINDOW), k, l
    cdef uint64_t below = h.first[floor + 1]
    cdef uint64_t any_quiet = h.n_features if h.n_features > h.n_loud else 0
    cdef uint128_t total = below + any_quiet, weight, draw
    for k in range(floor + 1, h.top + 1):
        total += (<uint128_t> (h.first[k + 1] - h.first[k])) << (k - floor)
    draw = next_below(bits, total)
    for k in range(h.top, floor, -1):
        weight = (<uint128_t> (h.first[k + 1] - h.first[k])) << (k - floor)
        if draw < weight:
            l = h.order[h.first[k] + <int32_t> (draw >> (k - floor))]
            break
        draw -= weight
    else:
        k = floor
        if draw >= below:
            feature[0] = <int64_t> (draw - below)
            bound[0] = h.base + floor - 1 - h.lowest
            return hear(h, bits, feature[0], score)
        l = h.order[<int32_t> draw]
    feature[0] = h.loud[l]
    bound[0] = h.base + k - 1 - power_of(h, feature[0])
    score[0] = kept_score(h, l)
    return not is_barred(h, feature[0])


cdef int pick_signed(score_heap* h, bit_source* bits, int64_t* feature, int* sign) noexcept nogil:
    """One draw of the mechanism: a status (see PICKED, NO_BITS), the feature and +1 or -1."""
    cdef int64_t score, bound, down
    while not bits.failed:
        h.counters.tries += 1
        if not propose(h, bits, feature, &score, &bound):
            continue
        sign[0] = 1 if next_coin(bits) else -1
        # accept with 2^-(bound + 1 - kappa * u); down is -kappa * u in units of 2^-shift
        down = sign[0] * h.multiplier * score
        if bernoulli_pow2(bits, bound + 1 + (down >> h.shift),
                          down & ((<int64_t> 1 << h.shift) - 1), h.shift):
            h.counters.picks += 1
            return 0
    return 1


def checked_powers(powers, n_features: int):
    """A copy of the powers, int8 (n_features,)."""
    given = np.asarray(powers)
    if given.dtype.kind not in "iu":
        raise ValueError(f"powers must be integers, not {given.dtype}")
    if given.shape != (n_features,):
        raise ValueError(f"powers have shape {given.shape}; ({n_features},) is needed")
    if n_features and not -MOST_POWER <= given.min() <= given.max() <= MOST_POWER:
        raise ValueError(f"powers must lie within {-MOST_POWER}..{MOST_POWER}")
    return given.astype(np.int8)


cdef class Scores:
    """The scores of all features and the private draw over them.

    n_features          features 0 .. n_features - 1 can be picked
    source              Rows whose loud features these are; scores start at 0
    multiplier, shift   kappa = multiplier / 2^shift, 1 <= shift <= 62
    powers              a public prior, or None: integers (n_features,) within [-60, 60];
                        feature j weighs 2^powers[j] times what its score gives it

    Two promises of the caller: multiplier * |G_j| < 2^61 for every score that can arise, and
    kappa * |G_j| <= 1 for every feature that is not loud. Picks are slow where almost no quiet
    feature has the highest power of the quiet ones: rare high powers are better loud.

    Raises ValueError where the powers are anything else.
    """

    def __cinit__(self, int64_t n_features, Rows source, int64_t multiplier, int shift,
                  powers=None):
        cdef score_heap* h = &self.heap
        cdef int64_t n_loud = len(source.loud)
        self.source, self.loud = source, source.loud
        self.score = np.zeros(max(n_loud, 1), dtype=source.change.sums.dtype)
        self.first = np.zeros(N_BUCKETS + 2, dtype=np.int32)
        self.order, self.place = (np.zeros(max(n_loud, 1), dtype=np.int32) for _ in range(2))
        self.bucket = np.zeros(max(n_loud, 1), dtype=np.uint16)
        cdef const int32_t[::1] loud = self.loud
        cdef int32_t[::1] first = self.first, order = self.order, place = self.place
        cdef uint16_t[::1] bucket = self.bucket
        cdef char[::1] score = self.score.view(np.int8)
        h.n_features, h.n_loud = n_features, n_loud
        h.loud = &loud[0] if n_loud else NULL
        h.first, h.order, h.place, h.bucket = &first[0], &order[0], &place[0], &bucket[0]
        h.score = &score[0]
        h.wide = source.change.view.wide
        h.shift = shift
        h.column_score = column_score
        h.context = &source.state
        if powers is not None:
            self._weigh(checked_powers(powers, n_features))
        self.set_rate(multiplier)

    def _weigh(self, powers):
        """Take int8 powers (n_features,) over."""
        cdef score_heap* h = &self.heap
        self.powers = powers
        quiet = np.delete(powers, self.loud)
        self.n_quiet = np.bincount(quiet + np.int64(MOST_POWER), minlength=2 * MOST_POWER + 1)
        cdef int8_t[::1] kept = self.powers
        cdef int64_t[::1] n_quiet = self.n_quiet
        h.powers, h.n_quiet = &kept[0], &n_quiet[0]
        h.least_power, h.lowest = powers.min(), MOST_POWER
        settle_lowest(h)

    @property
    def counters(self) -> dict:
        return self.heap.counters

    def absorb(self, ScoreChange change):
        """Add a change to the scores and empty it."""
        cdef score_heap* h = &self.heap
        cdef double started = perf_counter()
        with nogil:
            if h.wide:
                absorb(h, &change.view, <int64_t*> h.score, <int64_t*> change.view.sums)
            else:
                absorb(h, &change.view, <int32_t*> h.score, <int32_t*> change.view.sums)
        self.seconds_heap += perf_counter() - started

    def set_rate(self, int64_t multiplier):
        """Go on with kappa = multiplier / 2^shift; the promises above must hold for it too."""
        cdef score_heap* h = &self.heap
        h.multiplier = multiplier
        with nogil:
            if h.wide:
                rebuild(h, <int64_t*> h.score)
            else:
                rebuild(h, <int32_t*> h.score)

    def bar(self, int64_t feature):
        """Take a feature out of the draw, for good; its score is kept up to date all the same.

        Raises IndexError where there is no such feature, and ValueError where none would be left.
        """
        cdef score_heap* h = &self.heap
        cdef uint8_t[::1] barred
        if not 0 <= feature < h.n_features:
            raise IndexError(f"no feature {feature}")
        if self.barred is None:
            self.barred = np.zeros(h.n_features, dtype=np.uint8)
            barred = self.barred
            h.barred = &barred[0]
        if self.barred[feature]:
            return
        if self.n_barred == h.n_features - 1:
            raise ValueError("every other feature is barred already")
        self.n_barred += 1
        self.barred[feature] = 1
        if h.wide:
            leave_draw(h, feature, <int64_t*> h.score)
        else:
            leave_draw(h, feature, <int32_t*> h.score)

    def pick(self, Bits bits):
        """(feature, sign): one private draw.  Expected O(WINDOW), however many the features."""
        cdef int64_t feature
        cdef int sign, status
        cdef double started = perf_counter()
        with nogil:
            status = pick_signed(&self.heap, &bits.source, &feature, &sign)
        self.seconds_picks += perf_counter() - started
        if status == NO_BITS:
            bits.raise_failure()
        return feature, sign

    def _check(self):
        """Assert every invariant.  O(n_loud + N_BUCKETS), with powers also O(n_features)."""
        cdef score_heap* h = &self.heap
        cdef int64_t l
        cdef int32_t k
        self.source.change._check_empty()
        n_loud = len(self.loud)
        for l in range(n_loud):
            assert kept_score(h, l) == self.source.score(self.loud[l]), "scores are exact"
            assert h.bucket[l] == bucket_of(h, l, kept_score(h, l)) < N_BUCKETS
            assert h.order[h.place[l]] == l
            k = h.bucket[l]
            assert h.first[k] <= h.place[l] < h.first[k + 1]
        assert h.first[0] == 0 and h.first[N_BUCKETS] == n_loud
        assert h.top >= 1 and h.first[h.top + 1] == n_loud
        assert h.top == 1 or h.first[h.top] < n_loud, "the top bucket is in use"
        assert h.base == h.lowest or h.base > h.lowest and h.top > WINDOW
        if self.powers is None:
            assert h.lowest == h.least_power == 0
        else:
            self._check_powers()

    def _check_powers(self):
        cdef score_heap* h = &self.heap
        quiet = np.ones(h.n_features, dtype=bool)
        quiet[self.loud] = False
        if self.barred is not None:
            quiet &= self.barred == 0
        powers = self.powers[quiet]
        assert h.least_power == self.powers.min()
        assert h.lowest == powers.max(initial=h.least_power)
        for power in range(-MOST_POWER, MOST_POWER + 1):
            assert self.n_quiet[power + MOST_POWER] == np.count_nonzero(powers == power)
