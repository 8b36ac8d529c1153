// Sensors as parts of a rig: encoders, filters before adcs; white noise as it is described.
//
// Invariant: an addition that fails takes away the parts it had added.

#include "run/definition.h"

#include "base/alloc.h"

#include <latewood/elementary.h>
#include <latewood/quantity.h>

#include <math.h>
#include <stdio.h>

#define TWO_PI 6.283185307179586
#define NAME 240
#define MOST_EDGES 64 // between two stamps that are compared

// How many parts a rig has, to go back to.
typedef struct mark {
    int n_places, n_plants, n_connections, n_values, n_adcs, n_loops, n_edges;
} mark;

static mark mark_of(const lw_rig *r)
{
    return (mark){r->n_places, r->n_plants, r->n_connections, r->n_values,
                  r->n_adcs,   r->n_loops,  r->n_edges};
}

static lw_status or_back(lw_rig *r, mark m, lw_status status)
{
    if (status == LW_OK)
        return status;
    while (r->n_plants > m.n_plants)
        lw_plant_free(r->plants[--r->n_plants].plant);
    while (r->n_loops > m.n_loops)
        lw_law_free(r->loops[--r->n_loops].law);
    r->n_places = m.n_places;
    r->n_connections = m.n_connections;
    r->n_values = m.n_values;
    r->n_adcs = m.n_adcs;
    r->n_edges = m.n_edges;
    return status;
}

// A plant of one input that follows `signal`; takes the plant over.
static lw_status add_behind(lw_rig *rig, const char *origin, const char *name, const char *signal,
                            lw_plant *plant, lw_error *err)
{
    char to[NAME + 4];
    snprintf(to, sizeof to, "%s.in", name);
    lw_status status = lw_rig_add_plant(rig, origin, name, plant, err);
    lw_plant_free(plant);
    if (status == LW_OK)
        status = lw_rig_connect(rig, origin, signal, to, err);
    return status;
}

// A law that writes a value at each sample of `on`; takes the law over.
static lw_status add_law(lw_rig *rig, const char *origin, const char *name, const char *on,
                         int n_in, const lw_wire *in, const char *value, lw_law *law, lw_error *err)
{
    const lw_wire out = {lw_law_look(law)->out_names[0], value, 0};
    lw_loop_def def = lw_loop_default();
    def.origin = origin;
    def.name = name;
    def.law = law;
    def.on = on;
    def.n_inputs = n_in;
    def.n_outputs = 1;
    def.inputs = in;
    def.outputs = &out;
    lw_status status = lw_rig_add_loop(rig, &def, err);
    lw_law_free(law);
    return status;
}

// ---- encoders

lw_encoder_def lw_encoder_default(void)
{
    return (lw_encoder_def){
        .turn = TWO_PI, .every = {0, 1}, .edge_clock = {0, 1}, .zero_after = 0.1};
}

static lw_status check_edges(const lw__subject *s, const lw_encoder_def *def)
{
    if (def->speed_edges < 0 || def->speed_edges > MOST_EDGES)
        return lw__bad_field(s, "speed_edges", def->speed_edges, "permitted 1 to 64");
    if (def->speed_edges > 0 && def->speed_over > 0)
        return lw__fail_at(s->origin, s->err, LW_ERR_ARGUMENT,
                           "encoder \"%s\": speed_over and speed_edges are two ways to one value; "
                           "state one of them",
                           s->name);
    if (def->edge_clock.num != 0)
        LW__TRY(lw__check_period(s, "edge_clock", def->edge_clock));
    if (!(def->zero_after > 0 && def->zero_after <= 1e6))
        return lw__bad_field(s, "zero_after", def->zero_after, "above 0 s, up to 1e6 s is wanted");
    return LW_OK;
}

static lw_status check_encoder(const lw__subject *s, const lw_encoder_def *def)
{
    if (def->counts < 1 || def->counts > 1 << 24)
        return lw__bad_field(s, "counts", def->counts, "permitted 1 to 16777216 a turn");
    LW__TRY(lw__check_finite(s, "zero", def->zero));
    LW__TRY(lw__check_finite(s, "turn", def->turn));
    if (!(def->turn > 0))
        return lw__bad_field(s, "turn", def->turn, "above 0 is wanted");
    if (def->speed_over < 0 || def->speed_over > LW_LAW_MAX_STATES)
        return lw__bad_field(s, "speed_over", def->speed_over, "permitted 1 to 64 samples");
    return check_edges(s, def);
}

static void note_encoder(const lw_encoder_def *def, char *note, size_t room)
{
    int at = snprintf(note, room,
                      "an encoder of %d counts a turn: the value is in counts; an angle on an edge "
                      "has reached the upper count, both ways",
                      def->counts);
    if (def->speed_edges == 0)
        return;
    at += snprintf(note + at, room - (size_t)at,
                   "; its speed is the way over the time of the last %d edge%s", def->speed_edges,
                   def->speed_edges > 1 ? "s" : "");
    if (def->edge_clock.num > 0)
        at += snprintf(note + at, room - (size_t)at, ", stamped every %.6g s",
                       lw_period_seconds(def->edge_clock));
    snprintf(note + at, room - (size_t)at, ", 0 after %.6g s without one", def->zero_after);
}

// The edges, and a law that reads what they keep at each sample.
static lw_status add_edges(lw_rig *rig, const lw_encoder_def *def, double a_count, lw_error *err)
{
    static const char *const parts[] = {"span", "steps", "last"};
    char speed[NAME], law_name[NAME], signals[3][NAME + 8];
    lw__copier c = {rig->arena, 0};
    lw__edges_item item = {*def, rig->n_adcs - 1, rig->n_places};
    item.def.origin = lw__copy_text(&c, def->origin);
    item.def.name = lw__copy_text(&c, def->name);
    item.def.of = lw__copy_text(&c, def->of);
    lw__edges_item *at = lw__room((void **)&rig->edges, rig->n_edges, sizeof item);
    if (at == NULL || c.failed)
        return lw__no_room(def->origin, err);
    *at = item;
    rig->n_edges++;
    rig->n_places++;
    snprintf(speed, sizeof speed, "%s speed", def->name);
    snprintf(law_name, sizeof law_name, "%s speed from edges", def->name);
    LW__TRY(lw_rig_add_value(rig, def->origin, speed, 0, err));
    lw_law *law = NULL;
    LW__TRY(lw__blame(def->origin, err, lw_law_edge_speed(a_count, def->zero_after, &law, err)));
    lw_wire in[3];
    for (int k = 0; k < 3; k++) {
        snprintf(signals[k], sizeof signals[k], "%s.%s", def->name, parts[k]);
        in[k] = (lw_wire){parts[k], signals[k], 0};
    }
    return add_law(rig, def->origin, law_name, def->name, 3, in, speed, law, err);
}

static lw_status add_encoder(lw_rig *rig, const lw_encoder_def *def, lw_error *err)
{
    char speed[NAME], law_name[NAME], note[400];
    double a_count = def->turn / def->counts;
    lw_adc_def adc = lw_adc_default();
    adc.origin = def->origin;
    adc.name = def->name;
    adc.of = &def->of;
    adc.every = def->every;
    adc.offset = def->offset;
    adc.quantiser = (lw_quantiser){32, -2147483648.0, 2147483648.0, LW_ROUND_FLOOR};
    adc.gain = def->counts / def->turn;
    adc.bias = -def->zero * adc.gain;
    adc.note = note;
    note_encoder(def, note, sizeof note);
    LW__TRY(lw_rig_add_adc(rig, &adc, err));
    if (def->speed_edges > 0)
        return add_edges(rig, def, a_count, err);
    if (def->speed_over == 0)
        return LW_OK;
    snprintf(speed, sizeof speed, "%s speed", def->name);
    snprintf(law_name, sizeof law_name, "%s speed from counts", def->name);
    LW__TRY(lw_rig_add_value(rig, def->origin, speed, 0, err));
    lw_law *law = NULL;
    LW__TRY(lw__blame(def->origin, err, lw_law_count_speed(def->speed_over, a_count, &law, err)));
    const lw_wire in = {"counts", def->name, 0};
    return add_law(rig, def->origin, law_name, def->name, 1, &in, speed, law, err);
}

lw_status lw_rig_add_encoder(lw_rig *rig, const lw_encoder_def *def, lw_error *err)
{
    LW__TRY(lw__check_new_name(rig, def->origin, "encoder", def->name, err));
    lw__subject s = {def->origin, "encoder", def->name, err};
    LW__TRY(check_encoder(&s, def));
    mark m = mark_of(rig);
    return or_back(rig, m, add_encoder(rig, def, err));
}

// ---- analog filters

// Poles of a Butterworth filter of cut-off 1 rad/s: on the unit circle.
static void butterworth_poles(int n, double (*poles)[2])
{
    for (int k = 0; k < n / 2; k++) {
        double angle = TWO_PI / 4 * (2 * k + 1) / n, re = -lw_sin(angle), im = lw_cos(angle);
        poles[2 * k][0] = poles[2 * k + 1][0] = re;
        poles[2 * k][1] = im;
        poles[2 * k + 1][1] = -im;
    }
    if (n % 2 == 1) {
        poles[n - 1][0] = -1;
        poles[n - 1][1] = 0;
    }
}

static lw_status from_poles(int n, double cut_off, double (*poles)[2], lw_plant **out,
                            lw_error *err)
{
    double gain = 1;
    for (int k = 0; k < n; k++) {
        poles[k][0] *= cut_off;
        poles[k][1] *= cut_off;
        gain *= cut_off;
    }
    return lw_plant_zeros_poles(0, NULL, n, (const double(*)[2])poles, gain, out, err);
}

// |theta(jw)|^2 over theta(0)^2, c lowest power first.
static double bessel_loss(int n, const double *c, double w)
{
    double re = 0, im = 0, power = 1;
    for (int k = 0; k <= n; k++, power *= w) {
        if (k % 2 == 0)
            re += (k % 4 == 0 ? 1 : -1) * c[k] * power;
        else
            im += (k % 4 == 1 ? 1 : -1) * c[k] * power;
    }
    return (re * re + im * im) / (c[0] * c[0]);
}

// Reverse Bessel polynomial, (2n - k)! / (2^(n-k) k! (n-k)!) at s^k, scaled to half the power at
// the cut-off, which is found by halving.
static lw_status bessel(int n, double cut_off, lw_plant **out, lw_error *err)
{
    double c[9], den[9], lo = 0, hi = 16;
    c[n] = 1;
    for (int k = n - 1; k >= 0; k--) // ratio of neighbours
        c[k] = c[k + 1] * (2 * n - k) * (k + 1) / (2.0 * (n - k));
    for (int i = 0; i < 60; i++) {
        double middle = (lo + hi) / 2;
        *(bessel_loss(n, c, middle) < 2 ? &lo : &hi) = middle;
    }
    double scale = cut_off / hi, power = 1; // s^k / scale^k
    for (int k = n; k >= 0; k--, power *= scale)
        den[n - k] = c[k] * power;
    double num = den[n];
    const lw_poly top = {1, &num}, bottom = {n + 1, den};
    static const char *const in[] = {"in"}, *const outs[] = {"out"};
    return lw_plant_transfer(1, 1, &top, &bottom, in, outs, out, err);
}

static lw_status make_analog(const lw_adc_front *f, lw_plant **out, lw_error *err)
{
    double poles[8][2] = {{0}}, cut_off = TWO_PI * f->cut_off;
    int n = f->analog_order;
    if (f->analog == LW_ANALOG_BESSEL)
        return bessel(n, cut_off, out, err);
    if (f->analog == LW_ANALOG_BUTTERWORTH) {
        butterworth_poles(n, poles);
        return from_poles(n, cut_off, poles, out, err);
    }
    // n equal stages: 1 / (1 + x^2)^n is a half at x^2 = 2^(1/n) - 1
    double corner = 1 / sqrt(lw_expm1(lw_log(2) / n));
    for (int k = 0; k < n; k++)
        poles[k][0] = -corner;
    double gain = 1;
    for (int k = 0; k < n; k++) {
        poles[k][0] *= cut_off;
        gain *= corner * cut_off;
    }
    return lw_plant_zeros_poles(0, NULL, n, (const double(*)[2])poles, gain, out, err);
}

static lw_status check_front(const lw__subject *s, const lw_adc_def *def, const lw_adc_front *f)
{
    if (def->n_channels != 1)
        return lw__bad_field(s, "number of channels", def->n_channels,
                             "a filter is of one channel; give each an adc of its own");
    if (f->analog != LW_ANALOG_NONE && (f->analog_order < 1 || f->analog_order > 8))
        return lw__bad_field(s, "analog order", f->analog_order, "permitted 1 to 8");
    if (f->analog != LW_ANALOG_NONE && !(f->cut_off > 0 && f->cut_off <= 1e12))
        return lw__bad_field(s, "analog cut_off", f->cut_off, "above 0 Hz, up to 1e12 is wanted");
    if (f->sinc_order == 0)
        return LW_OK;
    if (f->sinc_order < 1 || f->sinc_order > 4)
        return lw__bad_field(s, "filter order", f->sinc_order, "permitted 1 to 4");
    if (f->ratio < 2 || f->ratio > 1024)
        return lw__bad_field(s, "filter ratio", f->ratio, "permitted 2 to 1024");
    LW__TRY(lw__check_period(s, "filter clock", f->clock));
    if (def->every.num > 0 || def->after != NULL || def->offset != 0 || def->average != 1)
        return lw__fail_at(s->origin, s->err, LW_ERR_ARGUMENT,
                           "adc \"%s\": a decimation filter has its own clock; every, after, "
                           "offset and average are not for it",
                           s->name);
    return LW_OK;
}

static lw_status add_analog(lw_rig *rig, const lw_adc_def *def, const lw_adc_front *f,
                            const char *signal, lw_error *err)
{
    char name[NAME];
    lw_plant *plant = NULL;
    snprintf(name, sizeof name, "%s analog", def->name);
    LW__TRY(lw__blame(def->origin, err, make_analog(f, &plant, err)));
    return add_behind(rig, def->origin, name, signal, plant, err);
}

// ---- decimation

static lw_status add_sinc(lw_rig *rig, const lw_adc_def *def, const lw_adc_front *f,
                          const char *signal, lw_error *err)
{
    char integral[NAME], clock[NAME], law_name[NAME], value[NAME], out[NAME + 8];
    snprintf(integral, sizeof integral, "%s integral", def->name);
    snprintf(clock, sizeof clock, "%s modulator", def->name);
    snprintf(law_name, sizeof law_name, "%s sinc", def->name);
    snprintf(value, sizeof value, "%s filtered", def->name);
    snprintf(out, sizeof out, "%s.out", integral);
    lw_plant *plant = NULL;
    lw_law *law = NULL;
    const char *of = out;
    LW__TRY(lw__blame(def->origin, err, lw_plant_integrator(1, &plant, err)));
    LW__TRY(add_behind(rig, def->origin, integral, signal, plant, err));
    lw_adc_def adc = lw_adc_default();
    adc.origin = def->origin;
    adc.name = clock;
    adc.of = &of;
    adc.every = f->clock;
    LW__TRY(lw_rig_add_adc(rig, &adc, err));
    LW__TRY(lw_rig_add_value(rig, def->origin, value, def->start, err));
    LW__TRY(lw__blame(def->origin, err, lw_law_sinc(f->sinc_order, f->ratio, &law, err)));
    const lw_wire in = {"integral", clock, 0};
    return add_law(rig, def->origin, law_name, clock, 1, &in, value, law, err);
}

static void note_front(const lw_adc_front *f, const lw_adc_def *def, char *note, size_t room)
{
    static const char *const kinds[] = {"", "RC", "Butterworth", "Bessel"};
    int at = 0;
    note[0] = 0;
    if (f->analog != LW_ANALOG_NONE)
        at = snprintf(note, room, "behind a %s low pass of order %d, -3 dB at %.6g Hz%s",
                      kinds[f->analog], f->analog_order, f->cut_off, f->sinc_order ? "; " : "");
    if (f->sinc_order > 0)
        snprintf(note + at, room - (size_t)at,
                 "\"%.80s\" through an ideal modulator of clock %.6g s and a sinc filter of order "
                 "%d, one value every %d clocks; group delay %.6g s and half a clock",
                 def->of[0], lw_period_seconds(f->clock), f->sinc_order, f->ratio,
                 f->sinc_order * (f->ratio - 1) / 2.0 * lw_period_seconds(f->clock));
}

static lw_status add_behind_front(lw_rig *rig, const lw_adc_def *def, const lw_adc_front *f,
                                  lw_error *err)
{
    char signal[NAME + 16], value[NAME], note[400];
    lw_adc_def adc = *def;
    const char *of = def->of[0];
    note_front(f, def, note, sizeof note);
    if (f->analog != LW_ANALOG_NONE) {
        LW__TRY(add_analog(rig, def, f, of, err));
        snprintf(signal, sizeof signal, "%s analog.out", def->name);
        of = signal;
    }
    if (f->sinc_order > 0) {
        LW__TRY(add_sinc(rig, def, f, of, err));
        snprintf(value, sizeof value, "%s filtered", def->name);
        of = value;
        adc.every = (lw_period){f->clock.num * f->ratio, f->clock.den};
        if (adc.every.num % adc.every.den == 0)
            adc.every = (lw_period){adc.every.num / adc.every.den, 1};
        adc.offset = 1e-12;
    }
    adc.of = &of;
    adc.note = note;
    return lw_rig_add_adc(rig, &adc, err);
}

lw_status lw_rig_add_adc_behind(lw_rig *rig, const lw_adc_def *def, const lw_adc_front *front,
                                lw_error *err)
{
    if (front->analog == LW_ANALOG_NONE && front->sinc_order == 0)
        return lw_rig_add_adc(rig, def, err);
    LW__TRY(lw__check_new_name(rig, def->origin, "adc", def->name, err));
    lw__subject s = {def->origin, "adc", def->name, err};
    LW__TRY(check_front(&s, def, front));
    mark m = mark_of(rig);
    return or_back(rig, m, add_behind_front(rig, def, front, err));
}

// ---- white noise

lw_status lw_rig_add_noise(lw_rig *rig, const lw_noise_def *def, lw_error *err)
{
    LW__TRY(lw__check_new_name(rig, def->origin, "noise", def->name, err));
    lw__subject s = {def->origin, "noise", def->name, err};
    LW__TRY(lw__check_at_least_0(&s, "density", def->density));
    lw__copier c = {rig->arena, 0};
    lw__noise_item item = {*def, rig->n_places};
    item.def.origin = lw__copy_text(&c, def->origin);
    item.def.name = lw__copy_text(&c, def->name);
    item.def.on = lw__copy_text(&c, def->on);
    lw__noise_item *at = lw__room((void **)&rig->noises, rig->n_noises, sizeof item);
    if (at == NULL || c.failed)
        return lw__no_room(def->origin, err);
    *at = item;
    rig->n_noises++;
    rig->n_places++;
    return LW_OK;
}
