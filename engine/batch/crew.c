// The parent's side of a crew: blocks out, rows in, losses made good.
//
// Workload: thousands of rows a second; one poll serves all pipes.
//
// Invariants
// 1. One block at most is out with a worker; which of its runs came back is known here.
// 2. A lost worker costs no row that had come, and no other run than the one it was at.

#define _DEFAULT_SOURCE // MAP_ANONYMOUS

#include "batch/crew_shared.h"

#include "base/alloc.h"

#include <errno.h>
#include <fcntl.h>
#include <poll.h>
#include <signal.h>
#include <stddef.h>
#include <stdio.h>
#include <string.h>
#include <sys/mman.h>
#include <sys/wait.h>
#include <unistd.h>

#define MOST_TRIES 3  // of one run
#define MOST_IDLE 200 // losses in a row without a row coming

typedef struct tried {
    int64_t point, run;
    int losses;
} tried;

typedef struct slot {
    int busy;
    lw_block out;      // what is with the worker; bits of rows that came are taken away
    lw_block given;    // the same, as it was given
    size_t n_in;       // bytes of an incomplete frame
    unsigned char *in; // 2 frames
} slot;

struct lw_crew {
    int n, n_values, n_lost, fruitless;
    pid_t keeper;
    lw__crew_pipes pipes;
    lw__crew_word *words;
    slot slots[LW_CREW_MOST];
    int n_again, again_room; // blocks to be computed again
    lw_block *again;
    int n_tried, tried_room;
    tried *tried;
    double *values;
};

// ---- starting and ending

static void close_end(int *fd)
{
    if (*fd >= 0)
        close(*fd);
    *fd = -1;
}

static void close_pipes(lw__crew_pipes *p)
{
    for (int i = 0; i < LW_CREW_MOST; i++)
        for (int e = 0; e < 2; e++) {
            close_end(&p->slot[i].request[e]);
            close_end(&p->slot[i].result[e]);
        }
    for (int e = 0; e < 2; e++) {
        close_end(&p->notice[e]);
        close_end(&p->control[e]);
    }
}

static int make_pipe(int ends[2])
{
    if (pipe(ends) != 0) {
        ends[0] = ends[1] = -1;
        return -1;
    }
    for (int e = 0; e < 2; e++)
        fcntl(ends[e], F_SETFD, FD_CLOEXEC);
    return 0;
}

static int open_pipes(lw__crew_pipes *p, int n)
{
    int failed = 0;
    memset(p, -1, sizeof *p);
    p->n = n;
    for (int i = 0; i < n; i++) {
        failed |= make_pipe(p->slot[i].request) != 0;
        failed |= make_pipe(p->slot[i].result) != 0;
        if (!failed)
            fcntl(p->slot[i].result[0], F_SETFL, O_NONBLOCK);
    }
    failed |= make_pipe(p->notice) != 0;
    failed |= make_pipe(p->control) != 0;
    return failed;
}

static int get_memory(lw_crew *crew)
{
    crew->values = lw__alloc(sizeof *crew->values * (size_t)(crew->n_values + 1));
    int failed = crew->values == NULL;
    for (int i = 0; i < crew->n; i++) {
        crew->slots[i].in = lw__alloc(2 * (size_t)LW__FRAME);
        failed |= crew->slots[i].in == NULL;
    }
    void *page = mmap(NULL, sizeof *crew->words * LW_CREW_MOST, PROT_READ | PROT_WRITE,
                      MAP_SHARED | MAP_ANONYMOUS, -1, 0);
    if (page == MAP_FAILED)
        return -1;
    crew->words = page;
    return failed;
}

lw_status lw_crew_start(const lw_crew_def *def, lw_crew **out, lw_error *err)
{
    if (def->jobs < 1 || def->jobs > LW_CREW_MOST)
        return lw_error_set(err, LW_ERR_ARGUMENT, "jobs is %d; permitted 1 to %d", def->jobs,
                            LW_CREW_MOST);
    if (def->n_values < 0 || def->n_values > LW_LEDGER_MOST_METRICS)
        return lw_error_set(err, LW_ERR_ARGUMENT, "%d values a run; permitted 0 to %d",
                            def->n_values, LW_LEDGER_MOST_METRICS);
    lw_crew *crew = lw__alloc(sizeof *crew);
    if (crew == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a crew");
    crew->n = def->jobs;
    crew->n_values = def->n_values;
    int no_pipes = open_pipes(&crew->pipes, crew->n);
    if (get_memory(crew) != 0) {
        lw_crew_free(crew);
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a crew");
    }
    crew->keeper = no_pipes ? -1 : fork();
    if (crew->keeper == 0)
        lw__crew_keep(def, &crew->pipes, crew->words);
    if (crew->keeper < 0) {
        const char *why = strerror(errno);
        lw_crew_free(crew);
        return lw_error_set(err, LW_ERR_PROCESS, "no process could be started: %s", why);
    }
    setpgid(crew->keeper, crew->keeper); // whoever is first
    for (int i = 0; i < crew->n; i++)
        close_end(&crew->pipes.slot[i].result[1]);
    close_end(&crew->pipes.notice[1]);
    close_end(&crew->pipes.control[0]);
    *out = crew;
    return LW_OK;
}

void lw_crew_free(lw_crew *crew)
{
    if (crew == NULL)
        return;
    close_pipes(&crew->pipes);
    if (crew->keeper > 0) {
        kill(-crew->keeper, SIGKILL); // the keeper's group: workers too
        while (waitpid(crew->keeper, NULL, 0) < 0 && errno == EINTR)
            continue;
    }
    for (int i = 0; i < crew->n; i++)
        lw__free(crew->slots[i].in);
    if (crew->words != NULL)
        munmap(crew->words, sizeof *crew->words * LW_CREW_MOST);
    lw__free(crew->again);
    lw__free(crew->tried);
    lw__free(crew->values);
    lw__free(crew);
}

int lw_crew_n_lost(const lw_crew *crew)
{
    return crew->n_lost;
}

long lw_crew_keeper(const lw_crew *crew)
{
    return (long)crew->keeper;
}

long lw_crew_worker(const lw_crew *crew, int index)
{
    return (long)crew->words[index].process;
}

// ---- work under way

typedef struct work {
    lw_crew *crew;
    const lw_crew_orders *orders;
    lw_error *err;
} work;

static lw_status no_memory(work *w)
{
    return lw_error_set(w->err, LW_ERR_MEMORY, "no memory for a crew");
}

static void *room(void *list, int n, int *have, size_t size)
{
    if (n < *have)
        return list;
    int more = *have > 0 ? 2 * *have : 16;
    void *grown = lw__realloc(list, size * (size_t)more);
    if (grown != NULL)
        *have = more;
    return grown;
}

static lw_status compute_again(work *w, lw_block block)
{
    lw_crew *crew = w->crew;
    if (block.mask == 0)
        return LW_OK;
    lw_block *list = room(crew->again, crew->n_again, &crew->again_room, sizeof *list);
    if (list == NULL)
        return no_memory(w);
    crew->again = list;
    list[crew->n_again++] = block;
    return LW_OK;
}

// Give the slot something to do; 0 where there is nothing.
static int give(work *w, int i)
{
    lw_crew *crew = w->crew;
    slot *s = &crew->slots[i];
    if (crew->n_again > 0)
        s->out = crew->again[--crew->n_again];
    else if (w->orders->next(w->orders->context, &s->out) != 0)
        return 0;
    s->given = s->out;
    s->busy = 1;
    // a worker that is gone by now is reported by the keeper, and the block then given again
    lw__write_all(crew->pipes.slot[i].request[1], &s->out, sizeof s->out);
    return 1;
}

static lw_status take_row(work *w, slot *s, lw_ledger_row *row)
{
    if (row->run / LW_LEDGER_BLOCK != s->out.block || row->point != s->out.point)
        return lw_error_set(w->err, LW_ERR_INTERNAL,
                            "a worker returned a run that it was not given");
    s->out.mask &= ~(UINT64_C(1) << (row->run % LW_LEDGER_BLOCK));
    w->crew->fruitless = 0;
    return w->orders->take(w->orders->context, row) != 0 ? LW_STOPPED : LW_OK;
}

static lw_status block_done(work *w, slot *s)
{
    s->busy = 0;
    if (s->out.mask != 0)
        return lw_error_set(w->err, LW_ERR_INTERNAL,
                            "a worker returned fewer runs than it was given");
    if (w->orders->finished == NULL)
        return LW_OK;
    return w->orders->finished(w->orders->context, &s->given) != 0 ? LW_STOPPED : LW_OK;
}

static lw_status take_frame(work *w, slot *s, const unsigned char *bytes)
{
    lw__frame_head head;
    memcpy(&head, bytes, sizeof head);
    const unsigned char *at = bytes + sizeof head;
    size_t rest = head.length - sizeof head;
    char text[LW_ERROR_TEXT + 1] = "";
    if (head.kind == LW__FRAME_DONE)
        return block_done(w, s);
    if (head.kind == LW__FRAME_WRONG) {
        memcpy(text, at, rest < LW_ERROR_TEXT ? rest : LW_ERROR_TEXT);
        return lw_error_set(w->err, LW_ERR_LAW, "%s", text);
    }
    lw_status status = LW_OK;
    for (int k = 0; k < head.n && status == LW_OK; k++) {
        lw__frame_row r;
        memcpy(&r, at, sizeof r);
        at += sizeof r;
        lw_ledger_row row = {.point = head.point,
                             .run = r.run,
                             .status = (lw_status)r.status,
                             .instant = r.instant,
                             .text = text,
                             .values = w->crew->values};
        if (head.kind == LW__FRAME_ENDED) {
            size_t n = rest - sizeof r;
            memcpy(text, at, n < LW_ERROR_TEXT ? n : LW_ERROR_TEXT);
        } else {
            memcpy(w->crew->values, at, sizeof(double) * (size_t)w->crew->n_values);
            at += sizeof(double) * (size_t)w->crew->n_values;
        }
        status = take_row(w, s, &row);
    }
    return status;
}

// Take up what a worker has written so far.
static lw_status drain(work *w, int i)
{
    slot *s = &w->crew->slots[i];
    for (;;) {
        ssize_t got = read(w->crew->pipes.slot[i].result[0], s->in + s->n_in,
                           2 * (size_t)LW__FRAME - s->n_in);
        if (got < 0 && errno == EINTR)
            continue;
        if (got <= 0)
            return LW_OK;
        s->n_in += (size_t)got;
        size_t at = 0;
        while (s->n_in - at >= sizeof(lw__frame_head)) {
            lw__frame_head head;
            memcpy(&head, s->in + at, sizeof head);
            if (head.length < sizeof head || head.length > LW__FRAME)
                return lw_error_set(w->err, LW_ERR_INTERNAL, "a worker wrote no frame");
            if (s->n_in - at < head.length)
                break;
            size_t from = offsetof(lw__frame_head, kind);
            if (head.sum != lw__frame_sum(s->in + at + from, head.length - from))
                return lw_error_set(w->err, LW_ERR_INTERNAL, "a worker's frame is damaged");
            lw_status status = take_frame(w, s, s->in + at);
            if (status != LW_OK)
                return status;
            at += head.length;
        }
        memmove(s->in, s->in + at, s->n_in - at);
        s->n_in -= at;
    }
}

// ---- losses

// How often a run's worker was lost, this time included; 0: no memory to count.
static int count_loss(lw_crew *crew, int64_t point, int64_t run)
{
    for (int k = 0; k < crew->n_tried; k++)
        if (crew->tried[k].point == point && crew->tried[k].run == run)
            return ++crew->tried[k].losses;
    tried *list = room(crew->tried, crew->n_tried, &crew->tried_room, sizeof *list);
    if (list == NULL)
        return 0;
    crew->tried = list;
    list[crew->n_tried++] = (tried){point, run, 1};
    return 1;
}

static lw_status give_up(work *w, slot *s, int64_t run, int how)
{
    char text[120];
    if (WIFSIGNALED(how))
        snprintf(text, sizeof text, "its process was lost %d times, at last by signal %d",
                 MOST_TRIES, WTERMSIG(how));
    else
        snprintf(text, sizeof text, "its process ended %d times, at last with code %d", MOST_TRIES,
                 WIFEXITED(how) ? WEXITSTATUS(how) : -1);
    lw_ledger_row row = {.point = s->out.point,
                         .run = run,
                         .status = LW_ERR_PROCESS,
                         .instant = -1,
                         .text = text,
                         .values = w->crew->values};
    return take_row(w, s, &row);
}

// The run the worker was at, tried once more or given up; the others of its block again.
static lw_status make_good(work *w, int i, int how)
{
    lw_crew *crew = w->crew;
    slot *s = &crew->slots[i];
    int64_t run = crew->words[i].run;
    lw_status status = drain(w, i);
    s->n_in = 0;
    struct pollfd left = {.fd = crew->pipes.slot[i].request[0], .events = POLLIN};
    lw_block unread;
    if (poll(&left, 1, 0) == 1 && read(left.fd, &unread, sizeof unread) < 0)
        return lw_error_set(w->err, LW_ERR_PROCESS, "a worker's pipe cannot be read");
    if (status != LW_OK || !s->busy)
        return status;
    uint64_t bit = run >= 0 ? UINT64_C(1) << (run % LW_LEDGER_BLOCK) : 0;
    if (run >= 0 && run / LW_LEDGER_BLOCK == s->out.block && (s->out.mask & bit) != 0) {
        int losses = count_loss(crew, s->out.point, run);
        if (losses == 0)
            return no_memory(w);
        if (losses >= MOST_TRIES)
            status = give_up(w, s, run, how);
    }
    if (status != LW_OK)
        return status;
    if (s->out.mask == 0)
        return block_done(w, s);
    s->busy = 0;
    // a run under suspicion alone, so that what it does costs no other run another time
    lw_block alone = {s->out.point, s->out.block, s->out.mask & bit};
    lw_block others = {s->out.point, s->out.block, s->out.mask & ~bit};
    status = compute_again(w, others);
    return status == LW_OK ? compute_again(w, alone) : status;
}

static lw_status take_notice(work *w)
{
    lw_crew *crew = w->crew;
    lw__crew_notice notice;
    ssize_t got = read(crew->pipes.notice[0], &notice, sizeof notice);
    if (got < 0 && errno == EINTR)
        return LW_OK;
    if (got != (ssize_t)sizeof notice || notice.slot < 0 || notice.slot >= crew->n)
        return lw_error_set(w->err, LW_ERR_PROCESS,
                            "the process that keeps the workers was lost; the batch can be gone on "
                            "with");
    crew->n_lost++;
    if (++crew->fruitless > MOST_IDLE)
        return lw_error_set(w->err, LW_ERR_PROCESS, "workers are lost again and again");
    lw_status status = make_good(w, notice.slot, notice.status);
    crew->words[notice.slot].run = -1;
    unsigned char replace = (unsigned char)notice.slot;
    if (status == LW_OK && lw__write_all(crew->pipes.control[1], &replace, 1) != 0)
        status =
            lw_error_set(w->err, LW_ERR_PROCESS, "the process that keeps the workers was lost");
    return status;
}

// ---- the loop

// Wait for news and take it up.
static lw_status attend(work *w)
{
    lw_crew *crew = w->crew;
    struct pollfd all[LW_CREW_MOST + 1];
    for (int i = 0; i < crew->n; i++)
        all[i] = (struct pollfd){.fd = crew->pipes.slot[i].result[0], .events = POLLIN};
    all[crew->n] = (struct pollfd){.fd = crew->pipes.notice[0], .events = POLLIN};
    int ready = poll(all, (nfds_t)crew->n + 1, 100);
    lw_status status = LW_OK;
    for (int i = 0; ready > 0 && i < crew->n && status == LW_OK; i++)
        if (all[i].revents & POLLIN)
            status = drain(w, i);
    if (ready > 0 && status == LW_OK && all[crew->n].revents)
        status = take_notice(w);
    if (status == LW_OK && w->orders->pause != NULL && w->orders->pause(w->orders->context) != 0)
        status = LW_STOPPED;
    return status;
}

lw_status lw_crew_work(lw_crew *crew, const lw_crew_orders *orders, lw_error *err)
{
    work w = {crew, orders, err};
    struct sigaction before;
    sigaction(SIGPIPE, &(struct sigaction){.sa_handler = SIG_IGN}, &before);
    lw_status status = LW_OK;
    while (status == LW_OK) {
        int busy = 0;
        for (int i = 0; i < crew->n; i++)
            busy += crew->slots[i].busy || give(&w, i);
        if (busy == 0)
            break;
        status = attend(&w);
    }
    sigaction(SIGPIPE, &before, NULL);
    return status;
}
