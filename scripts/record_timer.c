// Records how late a periodic timer thread is on this computer, to be replayed as a timing.
//
// A thread sleeps until each instant of a fixed grid (clock_nanosleep, CLOCK_MONOTONIC, absolute),
// does a small fixed job and notes the time since that grid instant. Other threads may load the
// processors meanwhile. Linux; not part of the library.
//
//   cc -std=c17 -O2 -pthread scripts/record_timer.c -o build/record_timer
//   build/record_timer -n 20000 -p 1000 -l 2 -m "two-core virtual server" > wakeups.txt
//
// 1. The grid never moves: after a late wake-up the next one is still due at its own instant.
// 2. Nothing is left out, smoothed or sorted: one line a wake-up, in order.
// 3. Nothing is written or allocated while recording.
#define _POSIX_C_SOURCE 200809L

#include <errno.h>
#include <inttypes.h>
#include <pthread.h>
#include <sched.h>
#include <stdatomic.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/utsname.h>
#include <time.h>
#include <unistd.h>

enum { JOB_STEPS = 2000, N_CALIBRATIONS = 1001, LOAD_BYTES = 1 << 22, MAX_LOADS = 256 };

typedef struct options {
    long n_wakeups, period_us, n_loads, priority;
    const char *machine;
} options;

typedef struct recording {
    options options;
    int64_t *latency; // [ns] from grid instant to end of job, n_wakeups values
    int error;        // errno of what stopped the thread, or 0
    atomic_int stop;  // ends the load threads
} recording;

static int64_t now_ns(void)
{
    struct timespec t;
    clock_gettime(CLOCK_MONOTONIC, &t);
    return (int64_t)t.tv_sec * 1000000000 + t.tv_nsec;
}

// The fixed job: a lightly damped second-order recurrence. Its result must go somewhere, or the
// compiler would leave it out.
static void do_job(volatile double *result)
{
    double x = 1.0, before = 0.0;
    for (int i = 0; i < JOB_STEPS; i++) {
        double next = 1.9 * x - 0.95 * before;
        before = x;
        x = next;
    }
    *result = x;
}

static void *load(void *context)
{
    recording *r = context;
    unsigned char *bytes = calloc(LOAD_BYTES, 1);
    unsigned sum = 0;
    while (bytes && !atomic_load(&r->stop)) {
        for (size_t i = 0; i < LOAD_BYTES; i += 64) {
            bytes[i] = (unsigned char)(bytes[i] + 1);
            sum += bytes[i];
        }
    }
    free(bytes);
    return (void *)(uintptr_t)sum;
}

static int sleep_until(int64_t instant)
{
    struct timespec t = {.tv_sec = (time_t)(instant / 1000000000),
                         .tv_nsec = (long)(instant % 1000000000)};
    int error;
    do {
        error = clock_nanosleep(CLOCK_MONOTONIC, TIMER_ABSTIME, &t, NULL);
    } while (error == EINTR);
    return error;
}

static void *record(void *context)
{
    recording *r = context;
    volatile double result;
    int64_t period = r->options.period_us * 1000;
    struct sched_param param = {.sched_priority = (int)r->options.priority};
    if (r->options.priority > 0)
        r->error = pthread_setschedparam(pthread_self(), SCHED_FIFO, &param);
    int64_t grid = now_ns() + 10 * period;
    for (long k = 0; k < r->options.n_wakeups && !r->error; k++) {
        r->error = sleep_until(grid);
        do_job(&result);
        r->latency[k] = now_ns() - grid;
        grid += period;
    }
    return NULL;
}

static int compare(const void *a, const void *b)
{
    int64_t x = *(const int64_t *)a, y = *(const int64_t *)b;
    return (x > y) - (x < y);
}

// Median time of the job on an otherwise idle thread [ns].
static int64_t calibrate(void)
{
    volatile double result;
    int64_t took[N_CALIBRATIONS];
    for (int i = 0; i < N_CALIBRATIONS; i++) {
        int64_t start = now_ns();
        do_job(&result);
        took[i] = now_ns() - start;
    }
    qsort(took, N_CALIBRATIONS, sizeof took[0], compare);
    return took[N_CALIBRATIONS / 2];
}

// Processor and kernel, without what names one build.
static void print_kernel(void)
{
    struct utsname u;
    if (uname(&u) != 0)
        return;
    const char *preemption = strstr(u.version, "PREEMPT");
    int n_preemption = preemption ? (int)strcspn(preemption, " ") : 0;
    int major = 0, minor = 0;
    sscanf(u.release, "%d.%d", &major, &minor);
    printf("%s, %s %d.%d%s%.*s", u.machine, u.sysname, major, minor, preemption ? ", " : "",
           n_preemption, preemption ? preemption : "");
}

static void print_header(const options *o, int64_t job, const char *date)
{
    printf("# Latency of a periodic timer thread, in us: one value a wake-up, in order.\n");
    printf("# From the nominal instant on a %ld us grid to the end of a small fixed job: lateness\n"
           "# of the wake-up plus duration of the job. A late wake-up does not move the grid.\n",
           o->period_us);
    printf("# This is a computer's timer, not a microcontroller's.\n");
    printf("# recorded: %s UTC by scripts/record_timer.c\n", date);
    printf("# machine: %s, ", o->machine);
    print_kernel();
    printf("\n# wake-ups: %ld by clock_nanosleep, CLOCK_MONOTONIC, absolute; ", o->n_wakeups);
    if (o->priority > 0)
        printf("SCHED_FIFO, priority %ld\n", o->priority);
    else
        printf("ordinary scheduling\n");
    printf("# load: %ld busy threads, and whatever else the machine was doing\n", o->n_loads);
    printf("# fixed job: second-order recurrence, %d steps; median %.3f us before the recording\n",
           (int)JOB_STEPS, (double)job / 1000.0);
}

// Values to standard output, a summary to standard error.
static void print_values(const recording *r)
{
    long n = r->options.n_wakeups;
    for (long k = 0; k < n; k++)
        printf("%.3f\n", (double)r->latency[k] / 1000.0);
    qsort(r->latency, (size_t)n, sizeof r->latency[0], compare);
    fprintf(stderr, "least %.1f, median %.1f, 99 %% %.1f, 99.9 %% %.1f, largest %.1f us\n",
            (double)r->latency[0] / 1e3, (double)r->latency[n / 2] / 1e3,
            (double)r->latency[n * 99 / 100] / 1e3, (double)r->latency[n * 999 / 1000] / 1e3,
            (double)r->latency[n - 1] / 1e3);
}

static int run_threads(recording *r)
{
    pthread_t timer, loads[MAX_LOADS];
    long n_started = 0;
    int error = 0;
    while (n_started < r->options.n_loads && !error) {
        error = pthread_create(&loads[n_started], NULL, load, r);
        n_started += !error;
    }
    if (!error && !(error = pthread_create(&timer, NULL, record, r)))
        pthread_join(timer, NULL);
    atomic_store(&r->stop, 1);
    for (long i = 0; i < n_started; i++)
        pthread_join(loads[i], NULL);
    return error ? error : r->error;
}

static int number(const char *text, long least, long most, const char *what, long *out)
{
    char *end;
    errno = 0;
    long value = strtol(text, &end, 10);
    if (errno || end == text || *end || value < least || value > most) {
        fprintf(stderr, "record_timer: %s is %s; permitted %ld to %ld\n", what, text, least, most);
        return -1;
    }
    *out = value;
    return 0;
}

static int read_options(int argc, char **argv, options *o)
{
    int letter, bad = 0;
    while ((letter = getopt(argc, argv, "n:p:l:r:m:")) != -1) {
        switch (letter) {
        case 'n':
            bad |= number(optarg, 1, 10000000, "number of wake-ups (-n)", &o->n_wakeups);
            break;
        case 'p':
            bad |= number(optarg, 10, 1000000, "period in us (-p)", &o->period_us);
            break;
        case 'l':
            bad |= number(optarg, 0, MAX_LOADS, "number of load threads (-l)", &o->n_loads);
            break;
        case 'r':
            bad |= number(optarg, 1, 99, "real-time priority (-r)", &o->priority);
            break;
        case 'm':
            o->machine = optarg;
            break;
        default:
            bad = -1;
        }
    }
    return bad || optind != argc ? -1 : 0;
}

int main(int argc, char **argv)
{
    recording r = {.options = {.n_wakeups = 20000,
                               .period_us = 1000,
                               .n_loads = 2,
                               .machine = "class of machine not stated"}};
    if (read_options(argc, argv, &r.options) != 0) {
        fputs("usage: record_timer [-n wake-ups] [-p period in us] [-l load threads]\n"
              "                    [-r real-time priority] [-m class of machine]\n",
              stderr);
        return 64;
    }
    r.latency = calloc((size_t)r.options.n_wakeups, sizeof r.latency[0]);
    if (!r.latency) {
        fputs("record_timer: memory could not be had\n", stderr);
        return 70;
    }
    // Touch the pages now, not while recording.
    memset(r.latency, 0xff, (size_t)r.options.n_wakeups * sizeof r.latency[0]);

    char date[32];
    time_t start = time(NULL);
    strftime(date, sizeof date, "%Y-%m-%d %H:%M", gmtime(&start));
    int64_t job = calibrate();
    int error = run_threads(&r);
    if (error) {
        fprintf(stderr, "record_timer: %s\n", strerror(error));
        free(r.latency);
        return 70;
    }
    print_header(&r.options, job, date);
    print_values(&r);
    free(r.latency);
    return fflush(stdout) != 0 || ferror(stdout) ? 74 : 0;
}
