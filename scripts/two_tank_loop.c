/* The two-tank loop of bench.py, hard-coded in C, as a yardstick for the engine.
 *
 * Two tanks in series with free outlets, an equal-percentage valve with rate limit and lag into
 * each, a level transmitter with noise and resolution on each, and a PI block on the lower level
 * that moves the upper valve. One fourth-order Runge-Kutta step and one scan a tick.
 *
 * Arguments: the number of ticks, then the numbers of the loop in the order of `struct loop`.
 * Output, on one line: seconds taken, last upper level [m], last lower level [m], last output.
 *
 * Standard C11; built with the compiler's highest optimisation, without fast-math.
 */
#include <math.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <time.h>

struct loop {
    double tick;                                    /* [s] */
    double area[2];                                 /* [m2] */
    double outlet[2];                               /* q = c sqrt(h) [m2.5/s] */
    double kv[2];                                   /* [m3/h at 1 bar] */
    double line_kv[2];                              /* [m3/h at 1 bar] */
    double rangeability[2];                         /* [-] */
    double stroke_time[2];                          /* [s] */
    double lag[2];                                  /* [s] */
    double root;                                    /* flow over Kv at the header's pressure */
    double span;                                    /* of both levels, from zero [m] */
    double noise;                                   /* [fraction of span] */
    double resolution;                              /* [fraction of span] */
    double gain;                                    /* [-] */
    double integral_time;                           /* [s] */
    double setpoint;                                /* [fraction of span] */
    double level[2];                                /* initial [m] */
    double output[2];                               /* initial, of both valves [-] */
};

#define NUMBERS (sizeof(struct loop) / sizeof(double))

static uint64_t seed = 88172645463325252u;

static double uniform(void) {                       /* Marsaglia, xorshift; in (0, 1) */
    seed ^= seed << 13;
    seed ^= seed >> 7;
    seed ^= seed << 17;
    return ((double)(seed >> 11) + 0.5) * (1.0 / 9007199254740992.0);
}

static double standard_normal(void) {               /* Box and Muller, both of the pair */
    static double other;
    static int kept = 0;
    if (kept) {
        kept = 0;
        return other;
    }
    double radius = sqrt(-2.0 * log(uniform())), angle = 6.283185307179586 * uniform();
    other = radius * sin(angle);
    kept = 1;
    return radius * cos(angle);
}

struct valve {
    double stem, travel, flow;                      /* rate-limited, behind the lag [-], [m3/s] */
    double half_flow, end_flow;                     /* at the middle and the end of a tick */
    double log_rangeability, half_decay, decay;
};

static double flow(const struct loop *p, int i, const struct valve *v, double travel) {
    double kv = p->kv[i] * exp((travel - 1.0) * v->log_rangeability);
    double line = p->line_kv[i];
    return p->root * kv * line / sqrt(kv * kv + line * line);
}

/* The lag behind a stem that moves at `rate` until it stands at `command`; exact. */
static double travel_after(const struct valve *v, double lag, double command, double rate,
                           double corner, double elapsed, double decay) {
    if (corner <= 0.0) return command + (v->travel - command) * decay;
    double start = v->travel - v->stem + rate * lag;
    if (corner >= elapsed) return v->stem + rate * (elapsed - lag) + start * decay;
    double gap = -rate * lag * exp(corner / lag) + start;   /* to the command, times exp(t/lag) */
    return command + gap * decay;
}

/* Move a valve over a tick; one that is at rest costs nothing. */
static void move(const struct loop *p, int i, struct valve *v, double command) {
    v->flow = v->end_flow;
    if (v->stem == command && v->travel == command) {
        v->half_flow = v->flow;
        return;
    }
    double T = p->tick, way = command - v->stem;
    double rate = copysign(1.0 / p->stroke_time[i], way), corner = fabs(way) * p->stroke_time[i];
    double half = travel_after(v, p->lag[i], command, rate, corner, T / 2, v->half_decay);
    double end = travel_after(v, p->lag[i], command, rate, corner, T, v->decay);
    v->half_flow = flow(p, i, v, half);
    v->end_flow = flow(p, i, v, end);
    v->travel = end;
    v->stem = corner <= T ? command : v->stem + rate * T;
}

static double root_of(double level) { return level > 0.0 ? sqrt(level) : 0.0; }

static void rates(const struct loop *p, double upper, double lower, double in_1, double in_2,
                  double *d) {
    double between = p->outlet[0] * root_of(upper);
    d[0] = (in_1 - between) / p->area[0];
    d[1] = (in_2 + between - p->outlet[1] * root_of(lower)) / p->area[1];
}

static void step(const struct loop *p, struct valve *v, const double *command, double *x) {
    double T = p->tick, k1[2], k2[2], k3[2], k4[2];
    for (int i = 0; i < 2; i++) move(p, i, &v[i], command[i]);
    rates(p, x[0], x[1], v[0].flow, v[1].flow, k1);
    rates(p, x[0] + T / 2 * k1[0], x[1] + T / 2 * k1[1], v[0].half_flow, v[1].half_flow, k2);
    rates(p, x[0] + T / 2 * k2[0], x[1] + T / 2 * k2[1], v[0].half_flow, v[1].half_flow, k3);
    rates(p, x[0] + T * k3[0], x[1] + T * k3[1], v[0].end_flow, v[1].end_flow, k4);
    for (int i = 0; i < 2; i++) x[i] += T / 6 * (k1[i] + 2 * k2[i] + 2 * k3[i] + k4[i]);
}

static double transmitted(const struct loop *p, double level) {
    double fraction = level / p->span;
    if (p->noise > 0.0) fraction += p->noise * standard_normal();
    return floor(fraction / p->resolution + 0.5) * p->resolution;
}

int main(int count, char **words) {
    struct loop p;
    if (count != (int)(2 + NUMBERS)) return 2;
    for (size_t i = 0; i < NUMBERS; i++) ((double *)&p)[i] = atof(words[2 + i]);
    long ticks = atol(words[1]);

    double x[2] = {p.level[0], p.level[1]}, command[2] = {p.output[0], p.output[1]};
    struct valve v[2];
    for (int i = 0; i < 2; i++) {
        v[i].stem = v[i].travel = p.output[i];
        v[i].log_rangeability = log(p.rangeability[i]);
        v[i].half_decay = exp(-p.tick / 2 / p.lag[i]);
        v[i].decay = exp(-p.tick / p.lag[i]);
        v[i].end_flow = flow(&p, i, &v[i], v[i].travel);
    }
    double integral = 0.0, upper = 0.0;
    struct timespec start, stop;
    timespec_get(&start, TIME_UTC);
    for (long tick = 0; tick < ticks; tick++) {
        upper += transmitted(&p, x[0]);
        double error = p.setpoint - transmitted(&p, x[1]);
        if (tick == 0)                              /* the first scan is in manual */
            integral = p.output[0] - p.gain * error * (1.0 + p.tick / p.integral_time);
        double increment = p.gain * p.tick / p.integral_time * error;
        double wanted = p.gain * error + integral + increment;
        if ((wanted > 1.0 && increment > 0.0) || (wanted < 0.0 && increment < 0.0))
            wanted -= increment;
        else
            integral += increment;
        command[0] = wanted < 0.0 ? 0.0 : wanted > 1.0 ? 1.0 : wanted;
        step(&p, v, command, x);
    }
    timespec_get(&stop, TIME_UTC);
    double taken = (double)(stop.tv_sec - start.tv_sec) + 1e-9 * (double)(stop.tv_nsec - start.tv_nsec);
    printf("%.9f %.12f %.12f %.12f %.3f\n", taken, x[0], x[1], command[0], upper);
    return 0;
}
