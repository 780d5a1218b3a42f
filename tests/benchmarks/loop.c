/* The compiled engine's loop in C, for the rules of a plain network: closure thresholds with a reopening level, incoming
 * thresholds, the referral order, the three last resorts and transfer delays. The benchmark checks that its sums equal
 * the engine's to the last bit. */
#include <stdint.h>

typedef int64_t whole;

enum { DISCHARGE = 10, TRANSFER_ARRIVAL = 20, NOBODY = -1, TURNED_AWAY = 0, ANY_BED = 2 };
enum { OWN_CLOSED = 1, INCOMING_CLOSED = 2, FULL = 4 };

typedef struct { whole beds, own_closes, own_reopens, incoming_closes, incoming_reopens, occupied, load, gates; double since_occupied, since_gates; } unit_state;
typedef struct { double time; whole key; } event;

static inline int before(event a, event b) { return a.time < b.time || (a.time == b.time && a.key < b.key); }

static whole choose(const unit_state *u, const whole *referral, whole units, whole home, whole last_resort) {
    int free_at_home = !(u[home].gates & FULL);
    if (free_at_home && !(u[home].gates & OWN_CLOSED)) return home;
    const whole *asked = referral + home * (units - 1);
    for (whole i = 0; i < units - 1 && asked[i] != NOBODY; i++)
        if (!(u[asked[i]].gates & (INCOMING_CLOSED | FULL))) return asked[i];
    if (last_resort == TURNED_AWAY) return NOBODY;
    if (free_at_home) return home;
    if (last_resort == ANY_BED)
        for (whole i = 0; i < units - 1 && asked[i] != NOBODY; i++)
            if (!(u[asked[i]].gates & FULL)) return asked[i];
    return NOBODY;
}

/* One cell: a whole replication. thresholds: (4, units). occupancy: (units, levels); gate_days: (units, 8);
 * counts: (units, 2 + 2 units): arrived, turned away, diverted, admitted. queue: room for every bed and one more. */
void run_cell(whole patients, const double *arrival, const whole *home_of, const double *stay, const double *delay,
              whole units, whole levels, const whole *beds, const whole *thresholds, const whole *referral,
              whole last_resort, double start, double end, unit_state *u, event *queue,
              double *occupancy, double *gate_days, whole *counts) {
    whole pending = 0, patient = 0, width = 2 + 2 * units;
    int counting = 0;
    for (whole i = 0; i < units; i++) {
        u[i] = (unit_state){beds[i], thresholds[i], thresholds[units + i], thresholds[2 * units + i],
                            thresholds[3 * units + i], 0, 0, 0, start, start};
        u[i].gates = (u[i].own_closes == 0 ? OWN_CLOSED : 0) | (u[i].incoming_closes == 0 ? INCOMING_CLOSED : 0);
    }
    for (;;) {
        double now = patient < patients ? arrival[patient] : end;
        int queued = pending > 0 && queue[pending - 1].time <= now;
        if (queued) now = queue[pending - 1].time;
        if (now >= end) break;
        if (!counting && now >= start) counting = 1;
        whole more_load = 0, more_occupied = 0, due = 0, who, unit;
        double length = 0.0;
        if (queued) {
            whole key = queue[--pending].key;
            who = (key >> 8) & ((1LL << 40) - 1);
            unit = key & 255;
            if ((key >> 48) == DISCHARGE) { more_load = -1; more_occupied = -1; }
            else { more_occupied = 1; due = DISCHARGE; length = stay[who]; }
        } else {
            who = patient++;
            whole home = home_of[who];
            if (counting) counts[home * width]++;
            unit = choose(u, referral, units, home, last_resort);
            if (unit == NOBODY) { if (counting) counts[home * width + 1]++; continue; }
            more_load = 1; more_occupied = 1; due = DISCHARGE; length = stay[who];
            if (unit != home) {
                if (counting) counts[home * width + 2 + unit]++;
                if (delay[who] > 0) { more_occupied = 0; due = TRANSFER_ARRIVAL; length = delay[who]; }
            }
        }
        unit_state *s = u + unit;
        if (more_occupied) {
            if (counting) {
                occupancy[unit * levels + s->occupied] += now - s->since_occupied;
                s->since_occupied = now;
                if (more_occupied > 0) counts[home_of[who] * width + 2 + units + unit]++;
            }
            s->occupied += more_occupied;
        }
        s->load += more_load;
        whole own = s->gates & OWN_CLOSED, incoming = s->gates & INCOMING_CLOSED;
        if (s->load >= s->own_closes) own = OWN_CLOSED; else if (s->load <= s->own_reopens) own = 0;
        if (s->load >= s->incoming_closes) incoming = INCOMING_CLOSED; else if (s->load <= s->incoming_reopens) incoming = 0;
        whole gates = own | incoming | (s->load >= s->beds ? FULL : 0);
        if (gates != s->gates) {
            if (counting) { gate_days[unit * 8 + s->gates] += now - s->since_gates; s->since_gates = now; }
            s->gates = gates;
        }
        if (due) {
            event added = {now + length, (due << 48) | (who << 8) | unit};
            whole place = pending++;
            while (place > 0 && before(queue[place - 1], added)) { queue[place] = queue[place - 1]; place--; }
            queue[place] = added;
        }
    }
    for (whole i = 0; i < units; i++) {
        occupancy[i * levels + u[i].occupied] += end - u[i].since_occupied;
        gate_days[i * 8 + u[i].gates] += end - u[i].since_gates;
    }
}

/* Every cell of a table on one intake; arrays with cells in front. */
void run_table(whole cells, whole patients, const double *arrival, const whole *home_of, const double *stay,
               const double *delay, whole units, whole levels, const whole *beds, const whole *thresholds,
               const whole *referral, whole last_resort, double start, double end, unit_state *u, event *queue,
               double *occupancy, double *gate_days, whole *counts) {
    for (whole c = 0; c < cells; c++)
        run_cell(patients, arrival, home_of, stay, delay, units, levels, beds, thresholds + c * 4 * units, referral,
                 last_resort, start, end, u, queue, occupancy + c * units * levels, gate_days + c * units * 8,
                 counts + c * units * (2 + 2 * units));
}
