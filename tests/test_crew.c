// Crews and ledgers: what is left after losses, interruptions and faults is what would have been.

#include "suite.h"

#include <latewood/crew.h>
#include <latewood/draw.h>
#include <signal.h>
#include <sqlite3.h>
#include <stdio.h>
#include <string.h>
#include <sys/stat.h>
#include <sys/wait.h>
#include <time.h>
#include <unistd.h>

#define POINTS 3
#define RUNS 500 // a point
#define VALUES 2

static const lw_fact facts[] = {{"study", "text", "return lw.study {}\n-- line 2"},
                                {"argument", "gain", "1.5"}};
static const lw_ledger_metric metrics[] = {{"overshoot", "1"}, {"settling \"time\"", "s"}};
static const lw_ledger_limit limits[] = {{"overshoot", 0, 0, 0.9}};

static char folder[] = "/tmp/latewood-crew-XXXXXX";

static const char *path_of(const char *name)
{
    static char path[4][200];
    static int next;
    char *p = path[next++ % 4];
    snprintf(p, sizeof path[0], "%s/%s", folder, name);
    return p;
}

static lw_ledger_def definition(const char *path)
{
    return (lw_ledger_def){.path = path,
                           .n_facts = 2,
                           .facts = facts,
                           .n_metrics = VALUES,
                           .metrics = metrics,
                           .n_limits = 1,
                           .limits = limits};
}

static void wait_for(double microseconds)
{
    struct timespec t = {0, (long)(microseconds * 1000)};
    nanosleep(&t, NULL);
}

// ---- a computation: one value from a draw, another now and then undefined, some runs end early

typedef struct habits {
    int64_t crashes_at; // run whose worker aborts, every time; -1: none
    int slow;           // microseconds a run
    int wrong;
} habits;

static int compute(void *context, const lw_block *block, lw_crew_desk *desk, char *message)
{
    const habits *h = context;
    for (int k = 0; k < 64; k++) {
        if (!(block->mask >> k & 1))
            continue;
        int64_t run = block->block * 64 + k;
        lw_crew_begin(desk, run);
        if (run == h->crashes_at)
            raise(SIGKILL);
        if (h->wrong && run == 70) {
            strcpy(message, "mount.lua:3: no such signal");
            return 1;
        }
        if (h->slow)
            wait_for(h->slow);
        double u = lw_draw_uniform((lw_address){5, (uint64_t)run, (uint32_t)block->point, 0});
        lw_ledger_row row = {.point = block->point, .run = run, .instant = -1};
        double values[VALUES] = {u, u < 0.1 ? (double)NAN : 1 / u};
        row.values = values;
        if (u > 0.99) {
            row.status = LW_ERR_NOT_FINITE;
            row.instant = u;
            row.text = "at 0.1 s: \"axis\": is not finite";
        }
        lw_crew_put(desk, &row);
    }
    return 0;
}

// ---- the parent's side

typedef struct batch {
    lw_ledger *ledger;
    int64_t point, block;
    int shard, n_shards, added, stop_after, uncommitted;
    lw_crew *crew;
    int kill_after, killed;
    lw_error err;
} batch;

static uint64_t wanted(const batch *b, int64_t block)
{
    uint64_t mask = 0;
    for (int k = 0; k < 64; k++) {
        int64_t run = block * 64 + k;
        if (run < RUNS && run % b->n_shards == b->shard)
            mask |= UINT64_C(1) << k;
    }
    return mask;
}

static int next_block(void *context, lw_block *out)
{
    batch *b = context;
    for (; b->point < POINTS; b->point++, b->block = 0)
        for (; b->block * 64 < RUNS; b->block++) {
            uint64_t done;
            ck_assert(lw_ledger_done(b->ledger, b->point, b->block, &done, &b->err) == LW_OK);
            uint64_t mask = wanted(b, b->block) & ~done;
            if (mask != 0) {
                *out = (lw_block){b->point, b->block++, mask};
                return 0;
            }
        }
    return 1;
}

static int take_row(void *context, const lw_ledger_row *row)
{
    batch *b = context;
    lw_status status = lw_ledger_add(b->ledger, row, &b->err);
    ck_assert_msg(status == LW_OK, "%s", b->err.text);
    if (++b->uncommitted == 100) {
        b->uncommitted = 0;
        ck_assert(lw_ledger_commit(b->ledger, &b->err) == LW_OK);
    }
    if (b->kill_after && ++b->added % b->kill_after == 0 && b->killed < 20) {
        long victim = lw_crew_worker(b->crew, b->killed % 2);
        b->killed++;
        if (victim > 0)
            kill((pid_t)victim, SIGKILL);
    } else if (!b->kill_after) {
        b->added++;
    }
    return b->stop_after && b->added >= b->stop_after;
}

typedef struct plan {
    int jobs, shard, n_shards, stop_after, kill_after;
    habits habits;
} plan;

static plan plain(int jobs)
{
    return (plan){.jobs = jobs, .n_shards = 1, .habits = {.crashes_at = -1}};
}

// Compute (the rest of) a batch into the ledger.
static lw_status compute_batch(const char *path, plan p, char *message)
{
    lw_crew_def crew_def = {
        .jobs = p.jobs, .n_values = VALUES, .compute = compute, .context = &p.habits};
    lw_ledger_def def = definition(path);
    batch b = {.n_shards = p.n_shards,
               .shard = p.shard,
               .stop_after = p.stop_after,
               .kill_after = p.kill_after};
    lw_status status = lw_crew_start(&crew_def, &b.crew, &b.err);
    ck_assert_msg(status == LW_OK, "%s", b.err.text);
    if (access(path, F_OK) != 0)
        ck_assert_msg(lw_ledger_create(&def, &b.err) == LW_OK, "%s", b.err.text);
    ck_assert_msg(lw_ledger_resume(&def, &b.ledger, &b.err) == LW_OK, "%s", b.err.text);
    for (int k = 0; k < POINTS; k++) {
        char name[20];
        snprintf(name, sizeof name, "point %d", k);
        ck_assert(lw_ledger_point(b.ledger, k, name, "gain=1", &b.err) == LW_OK);
    }
    lw_ledger_provenance(b.ledger, "jobs", p.jobs == 1 ? "1" : "many", &b.err);
    lw_crew_orders orders = {.next = next_block, .take = take_row, .context = &b};
    status = lw_crew_work(b.crew, &orders, &b.err);
    if (status == LW_OK)
        ck_assert(lw_ledger_commit(b.ledger, &b.err) == LW_OK);
    if (message != NULL)
        strcpy(message, b.err.text);
    if (p.kill_after)
        ck_assert_int_ge(lw_crew_n_lost(b.crew), 1);
    lw_crew_free(b.crew);
    lw_ledger_close(b.ledger);
    return status;
}

// ---- dumps: every table but provenance, and nothing of the file's layout

static int append_row(void *context, int n, char **values, char **names)
{
    FILE *out = context;
    (void)names;
    for (int k = 0; k < n; k++)
        fprintf(out, "%s|", values[k] != NULL ? values[k] : "NULL");
    fputc('\n', out);
    return 0;
}

static char *dump(const char *path)
{
    static const char *const tables[] = {
        "SELECT * FROM fact ORDER BY number",
        "SELECT * FROM metric ORDER BY number",
        "SELECT * FROM limits ORDER BY number",
        "SELECT * FROM point ORDER BY number",
        "SELECT point, run, status, printf('%!.17g', v1), printf('%!.17g', v2) FROM run "
        "ORDER BY point, run",
        "SELECT * FROM ended ORDER BY point, run",
        "SELECT * FROM done ORDER BY point, block",
        "SELECT * FROM tally ORDER BY point, name",
        "SELECT * FROM runs"};
    char *text = NULL;
    size_t size = 0;
    FILE *out = open_memstream(&text, &size);
    sqlite3 *db = NULL;
    ck_assert(sqlite3_open_v2(path, &db, SQLITE_OPEN_READONLY, NULL) == SQLITE_OK);
    for (size_t k = 0; k < sizeof tables / sizeof tables[0]; k++)
        ck_assert_msg(sqlite3_exec(db, tables[k], append_row, out, NULL) == SQLITE_OK, "%s: %s",
                      tables[k], sqlite3_errmsg(db));
    sqlite3_close(db);
    fclose(out);
    return text;
}

static void check_same(const char *got, const char *want)
{
    char *a = dump(got), *b = dump(want);
    ck_assert(strlen(b) > 10000);
    ck_assert_msg(strcmp(a, b) == 0, "%s and %s differ", got, want);
    free(a);
    free(b);
}

static void begin(void)
{
    strcpy(strrchr(folder, '-') + 1, "XXXXXX");
    ck_assert(mkdtemp(folder) != NULL);
    ck_assert(compute_batch(path_of("one"), plain(1), NULL) == LW_OK);
}

static void end(void)
{
    char command[260];
    snprintf(command, sizeof command, "rm -rf %s", folder);
    ck_assert(system(command) == 0);
}

// ---- the same content however it was computed

START_TEST(any_number_of_workers_leaves_the_same_ledger)
{
    static const int jobs[] = {2, 3, 7};
    for (int k = 0; k < 3; k++) {
        char name[20];
        snprintf(name, sizeof name, "jobs%d", jobs[k]);
        ck_assert(compute_batch(path_of(name), plain(jobs[k]), NULL) == LW_OK);
        check_same(path_of(name), path_of("one"));
    }
}
END_TEST

START_TEST(shards_one_after_the_other_leave_the_same_ledger)
{
    for (int shard = 0; shard < 3; shard++) {
        plan p = plain(2);
        p.shard = shard;
        p.n_shards = 3;
        ck_assert(compute_batch(path_of("shards"), p, NULL) == LW_OK);
    }
    check_same(path_of("shards"), path_of("one"));
}
END_TEST

START_TEST(stopping_and_going_on_leaves_the_same_ledger)
{
    plan p = plain(2);
    p.stop_after = 130;
    lw_status status = LW_STOPPED;
    int sessions = 0;
    for (; status == LW_STOPPED; sessions++) {
        status = compute_batch(path_of("stops"), p, NULL);
        ck_assert_int_lt(sessions, 40);
    }
    ck_assert(status == LW_OK);
    ck_assert_int_gt(sessions, 5);
    check_same(path_of("stops"), path_of("one"));
}
END_TEST

START_TEST(workers_killed_on_the_way_cost_nothing)
{
    plan p = plain(2);
    p.kill_after = 60;
    p.habits.slow = 50;
    ck_assert(compute_batch(path_of("kills"), p, NULL) == LW_OK);
    check_same(path_of("kills"), path_of("one"));
}
END_TEST

// The whole process and its crew gone at random moments; then gone on with.
START_TEST(parents_killed_on_the_way_leave_a_ledger_to_go_on_with)
{
    int finished = 0;
    for (uint32_t k = 0; k < 25; k++) {
        pid_t child = fork();
        if (child == 0) {
            plan p = plain(2);
            p.habits.slow = 100;
            _exit(compute_batch(path_of("parents"), p, NULL) == LW_OK ? 0 : 1);
        }
        wait_for(20000 + 60000 * lw_draw_uniform((lw_address){1, 2, 3, k}));
        kill(child, SIGKILL);
        int how;
        waitpid(child, &how, 0);
        finished += WIFEXITED(how) && WEXITSTATUS(how) == 0;
    }
    ck_assert_int_lt(finished, 25); // some were killed
    for (int k = 0; k < 100 && access(path_of("parents"), F_OK) != 0; k++)
        ck_assert(compute_batch(path_of("parents"), plain(1), NULL) == LW_OK);
    ck_assert(compute_batch(path_of("parents"), plain(2), NULL) == LW_OK);
    check_same(path_of("parents"), path_of("one"));
}
END_TEST

START_TEST(a_lost_keeper_is_said_and_can_be_gone_on_with)
{
    lw_crew_def def = {.jobs = 2,
                       .n_values = VALUES,
                       .compute = compute,
                       .context = &(habits){.crashes_at = -1, .slow = 1000}};
    lw_ledger_def ledger = definition(path_of("keeper"));
    batch b = {.n_shards = 1};
    ck_assert(lw_crew_start(&def, &b.crew, &b.err) == LW_OK);
    ck_assert(lw_ledger_create(&ledger, &b.err) == LW_OK);
    ck_assert(lw_ledger_resume(&ledger, &b.ledger, &b.err) == LW_OK);
    kill((pid_t)lw_crew_keeper(b.crew), SIGKILL);
    lw_crew_orders orders = {.next = next_block, .take = take_row, .context = &b};
    ck_assert(lw_crew_work(b.crew, &orders, &b.err) == LW_ERR_PROCESS);
    ck_assert(strstr(b.err.text, "was lost") != NULL);
    ck_assert(lw_ledger_commit(b.ledger, &b.err) == LW_OK);
    lw_crew_free(b.crew);
    lw_ledger_close(b.ledger);
    ck_assert(compute_batch(path_of("keeper"), plain(2), NULL) == LW_OK);
    check_same(path_of("keeper"), path_of("one"));
}
END_TEST

static int find_run(void *context, const lw_ledger_row *row)
{
    if (row->run != 200)
        return 0;
    ck_assert(row->status == LW_ERR_PROCESS);
    ck_assert_str_eq(row->text, "its process was lost 3 times, at last by signal 9");
    *(int *)context = 1;
    return 1;
}

START_TEST(a_run_that_takes_its_worker_along_costs_itself_only)
{
    plan p = plain(2);
    p.habits.crashes_at = 200;
    ck_assert(compute_batch(path_of("crash"), p, NULL) == LW_OK);
    lw_ledger *ledger;
    ck_assert(lw_ledger_open(path_of("crash"), &ledger, NULL) == LW_OK);
    int64_t n = 0;
    ck_assert(lw_ledger_tally(ledger, 1, "runs", &n, NULL) == LW_OK);
    ck_assert_int_eq(n, RUNS);
    int found = 0;
    ck_assert(lw_ledger_rows(ledger, 1, find_run, &found, NULL) == LW_OK);
    ck_assert_int_eq(found, 1);
    lw_ledger_close(ledger);
}
END_TEST

START_TEST(a_wrong_study_ends_the_batch_with_its_message)
{
    plan p = plain(2);
    p.habits.wrong = 1;
    char message[LW_ERROR_TEXT];
    ck_assert(compute_batch(path_of("wrong"), p, message) == LW_ERR_LAW);
    ck_assert_str_eq(message, "mount.lua:3: no such signal");
}
END_TEST

// ---- ledgers that are none, or another's

static void expect_refusal(const lw_ledger_def *def, lw_status status, const char *text)
{
    lw_ledger *ledger = NULL;
    lw_error err;
    lw_status got = lw_ledger_resume(def, &ledger, &err);
    ck_assert_msg(got == status && strstr(err.text, text) != NULL, "%d: %s", (int)got, err.text);
    ck_assert(ledger == NULL);
}

START_TEST(a_changed_study_is_refused_with_the_difference)
{
    lw_fact other[] = {facts[0], {"argument", "gain", "2"}};
    lw_ledger_def def = definition(path_of("one"));
    def.facts = other;
    expect_refusal(&def, LW_ERR_ARGUMENT,
                   "argument \"gain\" differs: the ledger has '1.5', now it is '2'");
    other[0].value = "return lw.study {}\n-- line 3";
    expect_refusal(&def, LW_ERR_ARGUMENT,
                   "\"text\", line 2 differs: the ledger has '-- line 2', now it is '-- line 3'");
    def.n_facts = 1;
    def.facts = facts;
    expect_refusal(&def, LW_ERR_ARGUMENT, "it has argument \"gain\" where this one has nothing");
}
END_TEST

START_TEST(what_is_no_ledger_is_refused_and_left_alone)
{
    const char *path = path_of("text");
    FILE *f = fopen(path, "w");
    for (int k = 0; k < 400; k++)
        fputs("no database at all\n", f);
    fclose(f);
    lw_ledger_def def = definition(path);
    expect_refusal(&def, LW_ERR_INPUT, "is no ledger");
    ck_assert(lw_ledger_create(&def, NULL) == LW_ERR_DUPLICATE);
    sqlite3 *db;
    sqlite3_open(path_of("foreign"), &db);
    sqlite3_exec(db, "CREATE TABLE t (a)", NULL, NULL, NULL);
    sqlite3_close(db);
    def.path = path_of("foreign");
    expect_refusal(&def, LW_ERR_INPUT, "is a database, but no ledger");
    def.path = path_of("missing");
    expect_refusal(&def, LW_ERR_INPUT, "No such file");
    struct stat about;
    ck_assert(stat(path, &about) == 0 && about.st_size == 400 * 19);
}
END_TEST

START_TEST(a_ledger_with_foreign_triggers_is_not_believed)
{
    ck_assert(compute_batch(path_of("trigger"), plain(1), NULL) == LW_OK);
    sqlite3 *db;
    sqlite3_open(path_of("trigger"), &db);
    ck_assert(sqlite3_exec(db, "CREATE TRIGGER t AFTER INSERT ON run BEGIN DELETE FROM run; END",
                           NULL, NULL, NULL) == SQLITE_OK);
    sqlite3_close(db);
    lw_ledger_def def = definition(path_of("trigger"));
    expect_refusal(&def, LW_ERR_INPUT, "triggers or views that no ledger has");
}
END_TEST

START_TEST(a_ledger_in_use_is_refused)
{
    lw_ledger_def def = definition(path_of("one"));
    lw_ledger *ledger;
    ck_assert(lw_ledger_resume(&def, &ledger, NULL) == LW_OK);
    pid_t child = fork(); // locks are between processes
    if (child == 0) {
        lw_ledger *second = NULL;
        lw_error err;
        lw_status status = lw_ledger_resume(&def, &second, &err);
        _exit(status == LW_ERR_OUTPUT && strstr(err.text, "in use by another process") ? 0 : 1);
    }
    int how;
    waitpid(child, &how, 0);
    ck_assert(WIFEXITED(how) && WEXITSTATUS(how) == 0);
    lw_ledger_close(ledger);
}
END_TEST

START_TEST(a_damaged_ledger_is_said_to_be)
{
    ck_assert(compute_batch(path_of("damaged"), plain(1), NULL) == LW_OK);
    struct stat about;
    stat(path_of("damaged"), &about);
    FILE *f = fopen(path_of("damaged"), "r+");
    fseek(f, about.st_size / 2, SEEK_SET);
    for (int k = 0; k < 20000; k++)
        fputc(0x55, f);
    fclose(f);
    lw_ledger_def def = definition(path_of("damaged"));
    lw_ledger *ledger = NULL;
    lw_error err;
    ck_assert(lw_ledger_resume(&def, &ledger, &err) == LW_ERR_INPUT);
    ck_assert_msg(strstr(err.text, "is damaged") != NULL, "%s", err.text);
}
END_TEST

// ---- what is kept

static int count_row(void *context, const lw_ledger_row *row)
{
    (void)row;
    ++*(int *)context;
    return 0;
}

START_TEST(counts_are_exact_whatever_is_kept)
{
    static const lw_keep keeps[] = {LW_KEEP_ALL, LW_KEEP_FAILURES, LW_KEEP_COUNTS};
    static const char *const names[] = {"k0", "k1", "k2"};
    int rows[3] = {0};
    for (int k = 0; k < 3; k++) {
        lw_ledger_def def = definition(path_of(names[k]));
        def.keep = keeps[k];
        lw_ledger *ledger;
        ck_assert(lw_ledger_create(&def, NULL) == LW_OK);
        ck_assert(lw_ledger_resume(&def, &ledger, NULL) == LW_OK);
        for (int run = 0; run < 200; run++) { // every fifth misses, every fiftieth ends early
            double values[2] = {run % 5 == 0 ? 1 : 0.5, 0};
            lw_ledger_row row = {.run = run, .values = values, .instant = 1, .text = "x"};
            row.status = run % 50 == 49 ? LW_ERR_NOT_FINITE : LW_OK;
            ck_assert(lw_ledger_add(ledger, &row, NULL) == LW_OK);
        }
        ck_assert(lw_ledger_commit(ledger, NULL) == LW_OK);
        int64_t n;
        lw_ledger_tally(ledger, 0, "runs", &n, NULL);
        ck_assert_int_eq(n, 200);
        lw_ledger_tally(ledger, 0, "ended early", &n, NULL);
        ck_assert_int_eq(n, 4);
        lw_ledger_tally(ledger, 0, "overshoot", &n, NULL);
        ck_assert_int_eq(n, 44);
        lw_ledger_rows(ledger, 0, count_row, &rows[k], NULL);
        lw_ledger_close(ledger);
    }
    ck_assert(rows[0] == 200 && rows[1] == 44 && rows[2] == 0);
}
END_TEST

START_TEST(the_same_run_with_other_values_is_refused)
{
    lw_ledger_def def = definition(path_of("twice"));
    lw_ledger *ledger;
    lw_error err;
    ck_assert(lw_ledger_create(&def, NULL) == LW_OK);
    ck_assert(lw_ledger_resume(&def, &ledger, NULL) == LW_OK);
    lw_ledger_row row = {.run = 3, .values = (double[]){1, 2}};
    ck_assert(lw_ledger_add(ledger, &row, &err) == LW_OK);
    ck_assert(lw_ledger_add(ledger, &row, &err) == LW_OK);
    row.values = (double[]){1, 2.5};
    ck_assert(lw_ledger_add(ledger, &row, &err) == LW_ERR_DUPLICATE);
    ck_assert(strstr(err.text, "run 3 of point 0 is there with other values") != NULL);
    lw_ledger_close(ledger);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("crew");
    TCase *c = tcase_create("crew");
    tcase_add_checked_fixture(c, begin, end);
    tcase_set_timeout(c, 120);
    tcase_add_test(c, any_number_of_workers_leaves_the_same_ledger);
    tcase_add_test(c, shards_one_after_the_other_leave_the_same_ledger);
    tcase_add_test(c, stopping_and_going_on_leaves_the_same_ledger);
    tcase_add_test(c, workers_killed_on_the_way_cost_nothing);
    tcase_add_test(c, parents_killed_on_the_way_leave_a_ledger_to_go_on_with);
    tcase_add_test(c, a_lost_keeper_is_said_and_can_be_gone_on_with);
    tcase_add_test(c, a_run_that_takes_its_worker_along_costs_itself_only);
    tcase_add_test(c, a_wrong_study_ends_the_batch_with_its_message);
    tcase_add_test(c, a_changed_study_is_refused_with_the_difference);
    tcase_add_test(c, what_is_no_ledger_is_refused_and_left_alone);
    tcase_add_test(c, a_ledger_with_foreign_triggers_is_not_believed);
    tcase_add_test(c, a_ledger_in_use_is_refused);
    tcase_add_test(c, a_damaged_ledger_is_said_to_be);
    tcase_add_test(c, counts_are_exact_whatever_is_kept);
    tcase_add_test(c, the_same_run_with_other_values_is_refused);
    suite_add_tcase(suite, c);
    return run_suite(suite);
}
