// Worker and keeper of a crew.
//
// The keeper forks workers, reports each loss, and forks a replacement when told to. It ends when
// the parent has gone and no worker is left.
//
// Invariants
// 1. Keeper and workers hold only their own ends of pipes, so that the end of a process is seen by
//    those that wait for it.
// 2. They never return into the caller's code and write nothing but frames.

#include "batch/crew_shared.h"

#include <errno.h>
#include <signal.h>
#include <stddef.h>
#include <stdlib.h>
#include <string.h>
#include <sys/select.h>
#include <sys/wait.h>
#include <unistd.h>

uint32_t lw__frame_sum(const void *bytes, size_t n)
{
    // FNV-1a (Fowler, Noll, Vo), 32 bits
    const unsigned char *b = bytes;
    uint32_t sum = 2166136261u;
    for (size_t k = 0; k < n; k++)
        sum = (sum ^ b[k]) * 16777619u;
    return sum;
}

int lw__write_all(int fd, const void *bytes, size_t n)
{
    const char *from = bytes;
    while (n > 0) {
        ssize_t done = write(fd, from, n);
        if (done < 0 && errno == EINTR)
            continue;
        if (done <= 0)
            return -1;
        from += done;
        n -= (size_t)done;
    }
    return 0;
}

// ---- worker

struct lw_crew_desk {
    int fd, n_values;
    lw__crew_word *word;
    size_t used; // of the frame under way
    union {
        lw__frame_head head;
        unsigned char bytes[LW__FRAME];
    } frame;
};

static void send_frame(lw_crew_desk *d, lw__frame_kind kind, int64_t point)
{
    size_t from = offsetof(lw__frame_head, kind);
    d->frame.head.length = (uint32_t)d->used;
    d->frame.head.kind = (int32_t)kind;
    d->frame.head.point = point;
    d->frame.head.sum = lw__frame_sum(d->frame.bytes + from, d->used - from);
    if (lw__write_all(d->fd, d->frame.bytes, d->used) != 0)
        _exit(0); // the parent has gone
    d->used = sizeof(lw__frame_head);
    d->frame.head.n = 0;
}

static void begin_frame(lw_crew_desk *d)
{
    d->used = sizeof(lw__frame_head);
    d->frame.head.n = 0;
}

static void send_rows(lw_crew_desk *d, int64_t point)
{
    if (d->frame.head.n > 0)
        send_frame(d, LW__FRAME_ROWS, point);
}

static void append(lw_crew_desk *d, const void *bytes, size_t n)
{
    memcpy(d->frame.bytes + d->used, bytes, n);
    d->used += n;
}

void lw_crew_begin(lw_crew_desk *d, int64_t run)
{
    d->word->run = run;
}

void lw_crew_put(lw_crew_desk *d, const lw_ledger_row *row)
{
    lw__frame_row head = {row->run, (int64_t)row->status, row->instant};
    size_t values = sizeof(double) * (size_t)d->n_values;
    if (row->status != LW_OK) {
        send_rows(d, row->point);
        append(d, &head, sizeof head);
        size_t n = row->text != NULL ? strlen(row->text) : 0;
        append(d, row->text, n < LW_ERROR_TEXT ? n : LW_ERROR_TEXT);
        d->frame.head.n = 1;
        send_frame(d, LW__FRAME_ENDED, row->point);
        return;
    }
    if (d->used + sizeof head + values > LW__FRAME)
        send_rows(d, row->point);
    append(d, &head, sizeof head);
    append(d, row->values, values);
    d->frame.head.n++;
}

void lw__crew_serve(const lw_crew_def *def, const lw__crew_ends *ends, lw__crew_word *word)
{
    static const struct sigaction usual = {.sa_handler = SIG_DFL};
    lw_crew_desk desk = {.fd = ends->result[1], .n_values = def->n_values, .word = word};
    sigaction(SIGCHLD, &usual, NULL);
    word->process = getpid();
    for (;;) {
        lw_block block;
        ssize_t got = read(ends->request[0], &block, sizeof block);
        if (got < 0 && errno == EINTR)
            continue;
        if (got != (ssize_t)sizeof block)
            _exit(0); // the parent has gone, or wants no more
        char message[LW_ERROR_TEXT] = "";
        begin_frame(&desk);
        word->run = -1;
        int wrong = def->compute(def->context, &block, &desk, message);
        send_rows(&desk, block.point);
        word->run = -1;
        if (wrong)
            append(&desk, message, strlen(message));
        send_frame(&desk, wrong ? LW__FRAME_WRONG : LW__FRAME_DONE, block.point);
    }
}

// ---- keeper

typedef struct keeper {
    const lw_crew_def *def;
    lw__crew_pipes *pipes;
    lw__crew_word *words;
    pid_t worker[LW_CREW_MOST];
    int n_alive;
} keeper;

static void hire(keeper *k, int slot)
{
    pid_t child = fork();
    if (child == 0) {
        lw__crew_pipes *p = k->pipes;
        for (int i = 0; i < p->n; i++)
            if (i != slot) {
                close(p->slot[i].request[0]);
                close(p->slot[i].result[1]);
            }
        close(p->notice[1]);
        close(p->control[0]);
        lw__crew_serve(k->def, &p->slot[slot], &k->words[slot]);
        _exit(0);
    }
    k->worker[slot] = child;
    k->n_alive += child > 0;
    if (child < 0)
        _exit(1); // no process to be had: the parent sees that the keeper is lost
}

// Workers that ended: one that left by itself is not missed.
static void collect(keeper *k)
{
    int how;
    pid_t gone;
    while ((gone = waitpid(-1, &how, WNOHANG)) > 0)
        for (int slot = 0; slot < k->pipes->n; slot++)
            if (k->worker[slot] == gone) {
                k->worker[slot] = 0;
                k->n_alive--;
                lw__crew_notice notice = {slot, how};
                if (!(WIFEXITED(how) && WEXITSTATUS(how) == 0))
                    lw__write_all(k->pipes->notice[1], &notice, sizeof notice);
            }
}

static void nothing(int signal)
{
    (void)signal;
}

void lw__crew_keep(const lw_crew_def *def, lw__crew_pipes *pipes, lw__crew_word *words)
{
    keeper k = {.def = def, .pipes = pipes, .words = words};
    const struct sigaction wake = {.sa_handler = nothing}, ignore = {.sa_handler = SIG_IGN};
    sigset_t blocked, open;
    setpgid(0, 0); // a key on the terminal is for the parent
    sigaction(SIGINT, &ignore, NULL);
    sigaction(SIGTERM, &(struct sigaction){.sa_handler = SIG_DFL}, NULL);
    sigaction(SIGPIPE, &ignore, NULL);
    sigaction(SIGCHLD, &wake, NULL);
    sigemptyset(&blocked);
    sigaddset(&blocked, SIGCHLD);
    for (int i = 0; i < pipes->n; i++) {
        close(pipes->slot[i].request[1]);
        close(pipes->slot[i].result[0]);
    }
    close(pipes->notice[0]);
    close(pipes->control[1]);
    for (int i = 0; i < pipes->n; i++)
        hire(&k, i);
    sigprocmask(SIG_BLOCK, &blocked, &open);
    int orphaned = 0;
    while (!orphaned || k.n_alive > 0) {
        collect(&k);
        fd_set in;
        FD_ZERO(&in);
        if (!orphaned)
            FD_SET(pipes->control[0], &in);
        int ready = orphaned && k.n_alive == 0
                        ? 0
                        : pselect(pipes->control[0] + 1, &in, NULL, NULL, NULL, &open);
        unsigned char slot;
        if (ready <= 0 || orphaned)
            continue;
        if (read(pipes->control[0], &slot, 1) == 1 && slot < pipes->n) {
            sigprocmask(SIG_SETMASK, &open, NULL);
            hire(&k, slot);
            sigprocmask(SIG_BLOCK, &blocked, NULL);
        } else {
            orphaned = 1;
        }
    }
    _exit(0);
}
