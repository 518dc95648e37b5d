/* The counting of rows in order as one loop: the same answers as counting.py, whose words explain the rules.
 *
 * Plain C without Python objects, called through ctypes (compiled.py), so it runs without the interpreter's lock.
 * All members of the struct are eight bytes wide and in the order of compiled.py's list of fields.
 */
#include <Python.h>
#include <stdint.h>
#include <string.h>

#define LAPSED 0
#define IN_ORDER 0
#define OUT_OF_ORDER 1
#define DAY_US INT64_C(86400000000)
#define SUB_OCTAVE_SHIFT 46
/* A history: what the state before was in the lowest slot. */
#define SLOT_BITS 16
#define SLOT INT64_C(0xFFFF)
#define NOTHING_KNOWN INT64_C(0x0001000100010001)

#ifdef _WIN32
#define EXPORT __declspec(dllexport)
#else
#define EXPORT __attribute__((visibility("default")))
#endif

/* What is kept of a customer, as held.py lays it out; the key stands in a column of its own. */
typedef struct {
    int64_t time, start, visit, before;
    int32_t code, first, steps, events, decided, converted;
    uint8_t sure;
} Record;

typedef struct {
    int64_t n_rows;
    const uint64_t *key;
    const int64_t *time;
    const int32_t *code;
    int64_t n_buckets;
    const uint64_t *first_keys;
    /* what is carried of the customers seen before */
    int64_t n_old, n_young;
    const uint64_t *o_key, *y_key;
    Record *o_record, *y_record;
    /* records of new customers */
    uint64_t *f_key;
    Record *f_record;
    /* moves that are not added to the cells, ended journeys, journeys begun, marked rows */
    uint8_t *m_bucket;
    int32_t *m_state, *m_next;
    int64_t *m_dwell, *m_before, *m_since;
    uint8_t *m_busy;
    uint8_t *e_bucket;
    int32_t *e_state, *e_outcome;
    uint8_t *e_sure;
    int64_t *e_steps, *e_elapsed;
    uint8_t *b_bucket;
    int32_t *b_state;
    uint8_t *b_sure;
    uint8_t *g_bucket;
    int32_t *g_outcome;
    int64_t *g_away;
    int64_t *repeated, *bare, *again;
    /* cells: n_bins is 0 where there are none */
    uint8_t *cells;
    uint32_t *contexts;
    const int64_t *lower, *upper;
    const int16_t *guess;
    int64_t n_bins, first_bucket, n_states, whole_days, mature_before, n_slots;
    /* the rules; silence is -1 where none is given */
    int64_t first_state, first_churned, silence, same_outcome, merge, log_start, complete, busy_after;
    /* how many of each were written, and what the cells gained */
    int64_t n_moves, n_ends, n_begun, n_gaps, n_fresh, n_repeated, n_bare, n_again, unsure_visits;
    double gained;
} Walk;

static int64_t bin_of(const Walk *w, int64_t dwell)
{
    if (w->whole_days)
        return dwell / DAY_US;
    /* The leading bits of the dwell as a floating-point number tell the lowest bin it can be in. */
    double wide = (double)dwell;
    uint64_t bits;
    memcpy(&bits, &wide, sizeof bits);
    int64_t bin = w->guess[bits >> SUB_OCTAVE_SHIFT];
    while (dwell > w->upper[bin])
        bin++;
    while (bin > 0 && dwell <= w->upper[bin - 1])
        bin--;
    return bin;
}

static int64_t lower_bound(const uint64_t *sorted, int64_t n, uint64_t value)
{
    int64_t low = 0;
    while (low < n) {
        int64_t middle = low + (n - low) / 2;
        if (sorted[middle] < value)
            low = middle + 1;
        else
            n = middle;
    }
    return low;
}

/* Moves on their way to the cells. The cells are far too many for the processor's cache: each is called for when the
 * move is made and changed some moves later, when it has come. */
#define MOST_WAITING 32
/* A cell: a count in 32 bits, then in 64 the dwell less the lower edges of its bin. */
#define CELL_SIZE 12

typedef struct {
    uint8_t *cell;
    int64_t rest, context;
} Waiting;

typedef struct {
    Waiting moves[MOST_WAITING];
    uint64_t n;
} Queue;

#if defined(__GNUC__) || defined(__clang__)
#define CALL_FOR(address) __builtin_prefetch(address, 1)
#else
#define CALL_FOR(address) ((void)(address))
#endif

static void add_to_cells(Walk *w, const Waiting *move)
{
    uint32_t n;
    int64_t rest;
    memcpy(&n, move->cell, sizeof n);
    memcpy(&rest, move->cell + sizeof n, sizeof rest);
    n++;
    rest += move->rest;
    memcpy(move->cell, &n, sizeof n);
    memcpy(move->cell + sizeof n, &rest, sizeof rest);
    w->contexts[move->context]++;
    w->gained += (double)move->rest;
}

static void add_waiting(Walk *w, const Queue *queue)
{
    uint64_t i = queue->n > MOST_WAITING ? queue->n - MOST_WAITING : 0;
    for (; i < queue->n; i++)
        add_to_cells(w, &queue->moves[i % MOST_WAITING]);
}

/* A move out of a state entered at `since`, with the history `before` (histories.py). */
static void add_move(Walk *w, Queue *queue, int64_t bucket, int64_t from, int64_t to, int64_t dwell, int64_t before,
                     int64_t since, int busy)
{
    if (w->n_bins && !busy) {
        int64_t bin = bin_of(w, dwell);
        int64_t width = w->first_state + w->n_states;
        int64_t pair = ((bucket - w->first_bucket) * w->n_states + from - w->first_state) * width + to;
        Waiting *move = &queue->moves[queue->n % MOST_WAITING];
        if (queue->n++ >= MOST_WAITING)
            add_to_cells(w, move);
        move->cell = w->cells + (pair * w->n_bins + bin) * CELL_SIZE;
        move->rest = dwell - w->lower[bin];
        move->context = (pair * width + (before & SLOT)) * 2 + (since < w->mature_before);
        CALL_FOR(move->cell);
        CALL_FOR(&w->contexts[move->context]);
        return;
    }
    int64_t i = w->n_moves++;
    w->m_bucket[i] = (uint8_t)bucket;
    w->m_state[i] = (int32_t)from;
    w->m_next[i] = (int32_t)to;
    w->m_dwell[i] = dwell;
    w->m_before[i] = before;
    w->m_since[i] = since;
    w->m_busy[i] = (uint8_t)busy;
}

static void end_journey(Walk *w, int64_t bucket, int64_t first, int64_t outcome, int sure, int64_t steps,
                        int64_t elapsed)
{
    int64_t i = w->n_ends++;
    w->e_bucket[i] = (uint8_t)bucket;
    w->e_state[i] = (int32_t)first;
    w->e_outcome[i] = (int32_t)outcome;
    w->e_sure[i] = (uint8_t)sure;
    w->e_steps[i] = steps;
    w->e_elapsed[i] = elapsed;
}

/* The records of the next customers of the rows, found some time before they are worked on, and called for. */
#define CUSTOMERS_AHEAD 16

typedef struct {
    /* Where the search stands: in the rows, and in both tables of records. */
    int64_t row, old, young;
    Record *record[CUSTOMERS_AHEAD];
} Ahead;

static void find_next(const Walk *w, Ahead *ahead)
{
    int64_t n = 0;
    while (n < CUSTOMERS_AHEAD && ahead->row < w->n_rows) {
        uint64_t who = w->key[ahead->row];
        Record *record = NULL;
        while (ahead->old < w->n_old && w->o_key[ahead->old] < who)
            ahead->old++;
        while (ahead->young < w->n_young && w->y_key[ahead->young] < who)
            ahead->young++;
        if (ahead->old < w->n_old && w->o_key[ahead->old] == who)
            record = &w->o_record[ahead->old];
        else if (ahead->young < w->n_young && w->y_key[ahead->young] == who)
            record = &w->y_record[ahead->young];
        if (record) {
            CALL_FOR(record);
            CALL_FOR((char *)(record + 1) - 1);
        }
        ahead->record[n++] = record;
        while (ahead->row < w->n_rows && w->key[ahead->row] == who)
            ahead->row++;
    }
}

EXPORT int64_t journeys_walk(Walk *w)
{
    const uint64_t *key = w->key;
    int64_t bucket, customers = 0, i = 0;
    Queue queue = {.n = 0};
    Ahead ahead = {.row = 0};
    const int64_t slots = (INT64_C(1) << (SLOT_BITS * w->n_slots)) - 1;
    if (!w->n_rows)
        return IN_ORDER;
    ahead.old = lower_bound(w->o_key, w->n_old, key[0]);
    ahead.young = lower_bound(w->y_key, w->n_young, key[0]);
    bucket = lower_bound(w->first_keys, w->n_buckets, key[0]);
    if (bucket == w->n_buckets || w->first_keys[bucket] > key[0])
        bucket--;
    while (i < w->n_rows) {
        uint64_t who = key[i];
        Record *record;
        int64_t last, prev, started, visit, first, steps, events, before, decided = 0, won = 0;
        int sure;
        while (bucket + 1 < w->n_buckets && who >= w->first_keys[bucket + 1])
            bucket++;
        if (customers % CUSTOMERS_AHEAD == 0)
            find_next(w, &ahead);
        record = ahead.record[customers++ % CUSTOMERS_AHEAD];
        if (record) {
            if (w->time[i] <= record->time)
                return OUT_OF_ORDER;
        } else {
            record = &w->f_record[w->n_fresh];
            memset(record, 0, sizeof *record);
            w->f_key[w->n_fresh++] = who;
        }
        last = record->time;
        prev = record->code;
        started = record->start;
        first = record->first;
        steps = record->steps;
        events = record->events;
        sure = record->sure;
        before = record->before;
        visit = w->merge ? record->visit : last;
        for (; i < w->n_rows && key[i] == who; i++) {
            int64_t now = w->time[i], what = w->code[i];
            int begins = 1, lapses = 0;
            events++;
            if (prev >= w->first_state) {
                lapses = w->silence >= 0 && now - last > w->silence;
                begins = lapses;
                if (lapses || !(w->merge && what == prev)) {
                    /* Merged, the first visit of an unsure journey may have begun before the log. */
                    if (w->merge && steps == 1 && !sure)
                        w->unsure_visits++;
                    else
                        add_move(w, &queue, bucket, prev, lapses ? LAPSED : what,
                                 (lapses ? last + w->silence : now) - visit, before, visit, events > w->busy_after);
                    if (!lapses) {
                        before = (before << SLOT_BITS | prev) & slots;
                        steps++;
                        visit = now;
                    }
                }
                if (lapses) {
                    end_journey(w, bucket, first, LAPSED, sure, steps + 1, last + w->silence - started);
                    decided++;
                }
            } else if (prev != 0 && what == prev && now - last <= w->same_outcome) {
                w->repeated[w->n_repeated++] = i;
                last = now;
                continue;
            } else if (prev != 0) {
                w->again[w->n_again++] = i;
            }
            if (begins && prev != 0) {
                int64_t g = w->n_gaps++;
                w->g_bucket[g] = (uint8_t)bucket;
                w->g_outcome[g] = (int32_t)(lapses ? LAPSED : prev);
                w->g_away[g] = now - last;
            }
            if (begins) {
                sure = prev != 0 || w->complete || (w->silence >= 0 && now >= w->log_start + w->silence);
                started = visit = now;
                first = what;
                steps = 1;
                before = sure ? 0 : NOTHING_KNOWN & slots;
                w->b_bucket[w->n_begun] = (uint8_t)bucket;
                w->b_state[w->n_begun] = (int32_t)what;
                w->b_sure[w->n_begun++] = (uint8_t)sure;
                if (what < w->first_state)
                    w->bare[w->n_bare++] = i;
            }
            if (what < w->first_state) {
                end_journey(w, bucket, first, what, sure, steps, now - started);
                decided++;
                won += what < w->first_churned;
            }
            prev = what;
            last = now;
        }
        record->time = last;
        record->start = started;
        record->visit = visit;
        record->before = before;
        record->code = (int32_t)prev;
        record->first = (int32_t)first;
        record->steps = (int32_t)steps;
        record->events = (int32_t)events;
        record->decided += (int32_t)decided;
        record->converted += (int32_t)won;
        record->sure = (uint8_t)sure;
    }
    add_waiting(w, &queue);
    return IN_ORDER;
}

/* Bring rows into the given order, events as codes; tell whether any row is not later than the one before it of the
 * same customer, which the loop above does not expect. */
EXPORT int64_t journeys_gather(int64_t n, const int64_t *order, const uint64_t *key, const int64_t *time,
                               const int32_t *event, const int32_t *code_of_event, uint64_t *out_key,
                               int64_t *out_time, int32_t *out_code)
{
    int64_t i, not_later = 0;
    for (i = 0; i < n; i++) {
        int64_t at = order[i];
        out_key[i] = key[at];
        out_time[i] = time[at];
        out_code[i] = code_of_event[event[at]];
    }
    for (i = 1; i < n; i++)
        not_later |= (out_key[i] == out_key[i - 1]) & (out_time[i] <= out_time[i - 1]);
    return not_later;
}

/* Put the leading bits of each key before its position. */
EXPORT void journeys_pack(int64_t n, int64_t bits, const uint64_t *key, uint64_t *packed)
{
    int64_t i;
    for (i = 0; i < n; i++)
        packed[i] = key[i] >> bits << bits | (uint64_t)i;
}

/* Turn words made of (leading bits of a key, position), which are sorted, into the positions; tell whether keys that
 * share the leading bits stand in the wrong order. */
EXPORT int64_t journeys_positions(int64_t n, int64_t bits, const uint64_t *key, uint64_t *packed)
{
    const uint64_t mask = (UINT64_C(1) << bits) - 1;
    uint64_t above = 0, at = 0;
    int64_t i, wrong = 0;
    for (i = 0; i < n; i++) {
        uint64_t leading = packed[i] >> bits, position = packed[i] & mask;
        if (i && leading == above)
            wrong |= key[position] < key[at];
        above = leading;
        at = position;
        packed[i] = position;
    }
    return wrong;
}

/* Put records of new customers among those there are, both by key; behind these there is room for the new ones. */
EXPORT void journeys_insert(int64_t n_old, uint64_t *key, Record *record, int64_t n_new, const uint64_t *new_key,
                            const Record *new_record)
{
    /* From behind, so that nothing is overwritten that is still to be moved. */
    while (n_new) {
        uint64_t who = new_key[--n_new];
        int64_t from = n_old;
        while (from && key[from - 1] > who)
            from--;
        memmove(key + from + n_new + 1, key + from, (size_t)(n_old - from) * sizeof *key);
        memmove(record + from + n_new + 1, record + from, (size_t)(n_old - from) * sizeof *record);
        key[from + n_new] = who;
        record[from + n_new] = new_record[n_new];
        n_old = from;
    }
}

/* Add up values by group: group g is the items of `order` from start[g] up to the start of the next. */
EXPORT void journeys_group_sums(int64_t n, const int64_t *order, int64_t n_groups, const int64_t *start,
                                const int64_t *value, int64_t *out)
{
    int64_t g, i;
    for (g = 0; g < n_groups; g++) {
        const int64_t end = g + 1 < n_groups ? start[g + 1] : n;
        uint64_t sum = 0;
        for (i = start[g]; i < end; i++)
            sum += (uint64_t)value[order[i]];
        out[g] = (int64_t)sum;
    }
}

/* The 64-bit keys of customers, as identity.py explains them. */
#define GOLDEN UINT64_C(0x9E3779B97F4A7C15)

static uint64_t mix(uint64_t x)
{
    x ^= x >> 30;
    x *= UINT64_C(0xBF58476D1CE4E5B9);
    x ^= x >> 27;
    x *= UINT64_C(0x94D049BB133111EB);
    return x ^ (x >> 31);
}

EXPORT void journeys_mix(int64_t n, const uint64_t *in, uint64_t *out)
{
    int64_t i;
    for (i = 0; i < n; i++)
        out[i] = mix(in[i]);
}

/* Text i begins at offset i and ends at the next; the offsets have 64 bits where `wide`, else 32. */
EXPORT void journeys_text_keys(int64_t n, int64_t wide, const void *offsets, const char *data, uint64_t *out)
{
    const int64_t *far = offsets;
    const int32_t *near = offsets;
    int64_t i, j, end = wide ? far[0] : near[0], known = -1;
    uint64_t of_length = 0;
    for (i = 0; i < n; i++) {
        const int64_t start = end, length = (end = wide ? far[i + 1] : near[i + 1]) - start;
        const char *text = data + start;
        uint64_t total;
        if (length != known) {
            known = length;
            of_length = mix((uint64_t)length ^ GOLDEN);
        }
        total = of_length;
        for (j = 0; 8 * j < length; j++) {
            uint64_t word = 0;
            int64_t left = length - 8 * j;
            if (left >= 8) {
                memcpy(&word, text + 8 * j, 8);
            } else {
                int64_t k;
                for (k = 0; k < left; k++)
                    word |= (uint64_t)(unsigned char)text[8 * j + k] << (8 * k);
            }
            total += mix(word + ((uint64_t)j + 1) * GOLDEN);
        }
        out[i] = mix(total);
    }
}

/* Dividing by what the compiler knows is far faster. */
#define N_BUCKETS UINT64_C(200)

EXPORT void journeys_bucket_major(int64_t n, const uint64_t *key, const uint64_t *first_keys, uint64_t *out)
{
    int64_t i;
    for (i = 0; i < n; i++) {
        uint64_t above = key[i] / N_BUCKETS;
        out[i] = first_keys[key[i] - above * N_BUCKETS] + above;
    }
}

/* How large the structs are that this library was built for, held against those of compiled.py. */
EXPORT int64_t journeys_walk_size(void)
{
    return (int64_t)sizeof(Walk);
}

EXPORT int64_t journeys_record_size(void)
{
    return (int64_t)sizeof(Record);
}

/* A module without functions: it is there so that the build puts the library where Python finds it. */
static struct PyModuleDef definition = {PyModuleDef_HEAD_INIT, "_walk", NULL, -1, NULL, NULL, NULL, NULL, NULL};

PyMODINIT_FUNC PyInit__walk(void)
{
    return PyModule_Create(&definition);
}
