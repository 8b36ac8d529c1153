// How a ledger is laid out: tables, what they begin with, and whether a file is laid out so.
//
// Workload: once a batch.
//
// Invariants
// 1. The layout depends on the number of metrics alone; a file whose tables read otherwise is not
//    believed, so that nothing of a foreign schema (views, triggers) ever runs.

#include "batch/ledger_file.h"

#include "base/alloc.h"

#include <stdio.h>
#include <string.h>

static const char *const fixed[][2] = {
    {"fact", "CREATE TABLE fact (number INTEGER PRIMARY KEY, section TEXT NOT NULL, "
             "name TEXT NOT NULL, value TEXT NOT NULL)"},
    {"metric", "CREATE TABLE metric (number INTEGER PRIMARY KEY, name TEXT NOT NULL, "
               "unit TEXT NOT NULL, held_in TEXT NOT NULL)"},
    {"limits", "CREATE TABLE limits (number INTEGER PRIMARY KEY, name TEXT NOT NULL, "
               "metric INTEGER NOT NULL, kind INTEGER NOT NULL, value REAL NOT NULL)"},
    {"point", "CREATE TABLE point (number INTEGER PRIMARY KEY, name TEXT NOT NULL, "
              "parameters TEXT NOT NULL)"},
    {"ended", "CREATE TABLE ended (point INTEGER, run INTEGER, instant REAL NOT NULL, "
              "text TEXT NOT NULL, PRIMARY KEY (point, run)) WITHOUT ROWID"},
    {"done", "CREATE TABLE done (point INTEGER, block INTEGER, mask INTEGER NOT NULL, "
             "PRIMARY KEY (point, block)) WITHOUT ROWID"},
    {"tally", "CREATE TABLE tally (point INTEGER, name TEXT, count INTEGER NOT NULL, "
              "PRIMARY KEY (point, name)) WITHOUT ROWID"},
    {"provenance", "CREATE TABLE provenance (session INTEGER NOT NULL, name TEXT NOT NULL, "
                   "value TEXT NOT NULL)"}};
#define N_FIXED ((int)(sizeof fixed / sizeof fixed[0]))

// CREATE TABLE run for n metrics; the caller frees it.
static char *run_table(int n)
{
    size_t room = 200 + 24 * (size_t)n;
    char *sql = lw__alloc(room);
    if (sql == NULL)
        return NULL;
    size_t used = (size_t)snprintf(
        sql, room, "CREATE TABLE run (point INTEGER, run INTEGER, status INTEGER NOT NULL, ");
    for (int k = 1; k <= n; k++)
        used += (size_t)snprintf(sql + used, room - used, "v%d REAL, ", k);
    snprintf(sql + used, room - used, "PRIMARY KEY (point, run)) WITHOUT ROWID");
    return sql;
}

// The view for people: names of points and metrics in place of numbers.
static lw_status make_view(lw_ledger *ledger, const lw_ledger_def *def, lw_error *err)
{
    sqlite3_str *sql = sqlite3_str_new(ledger->db);
    sqlite3_str_appendall(sql, "CREATE VIEW runs AS SELECT point.name AS point, "
                               "run.run AS run, run.status AS status");
    for (int k = 0; k < def->n_metrics; k++)
        sqlite3_str_appendf(sql, ", v%d AS \"%w\"", k + 1, def->metrics[k].name);
    sqlite3_str_appendall(sql, " FROM run JOIN point ON point.number = run.point "
                               "ORDER BY run.point, run.run");
    char *text = sqlite3_str_finish(sql);
    lw_status status = text != NULL ? lw__ledger_do(ledger, err, text)
                                    : lw_error_set(err, LW_ERR_MEMORY, "no memory for a ledger");
    sqlite3_free(text);
    return status;
}

static lw_status insert(lw_ledger *ledger, lw_error *err, const char *sql, int n,
                        const char *const *texts)
{
    sqlite3_stmt *s = NULL;
    lw_status status = lw__ledger_prepare(ledger, err, sql, &s);
    for (int k = 0; status == LW_OK && k < n; k++)
        if (sqlite3_bind_text(s, k + 1, texts[k], -1, SQLITE_STATIC) != SQLITE_OK)
            status = lw__ledger_fault(ledger, err, "writing");
    if (status == LW_OK && sqlite3_step(s) != SQLITE_DONE)
        status = lw__ledger_fault(ledger, err, "writing");
    sqlite3_finalize(s);
    return status;
}

static lw_status fill(lw_ledger *ledger, const lw_ledger_def *def, lw_error *err)
{
    lw_status status = LW_OK;
    for (int k = 0; status == LW_OK && k < def->n_facts; k++)
        status = insert(
            ledger, err, "INSERT INTO fact (section, name, value) VALUES (?1, ?2, ?3)", 3,
            (const char *[]){def->facts[k].section, def->facts[k].name, def->facts[k].value});
    for (int k = 0; status == LW_OK && k < def->n_metrics; k++) {
        char column[16];
        snprintf(column, sizeof column, "v%d", k + 1);
        status = insert(ledger, err, "INSERT INTO metric (name, unit, held_in) VALUES (?1, ?2, ?3)",
                        3, (const char *[]){def->metrics[k].name, def->metrics[k].unit, column});
    }
    for (int k = 0; status == LW_OK && k < def->n_limits; k++) {
        char *sql = sqlite3_mprintf("INSERT INTO limits (name, metric, kind, value) "
                                    "VALUES (?1, %d, %d, %!.17g)",
                                    def->limits[k].metric + 1, (int)def->limits[k].kind,
                                    def->limits[k].limit);
        status = sql != NULL ? insert(ledger, err, sql, 1, &def->limits[k].name)
                             : lw_error_set(err, LW_ERR_MEMORY, "no memory for a ledger");
        sqlite3_free(sql);
    }
    return status;
}

lw_status lw__ledger_lay_out(lw_ledger *ledger, const lw_ledger_def *def, lw_error *err)
{
    char mark[120];
    snprintf(mark, sizeof mark, "PRAGMA application_id=%d; PRAGMA user_version=%d; BEGIN",
             LW__LEDGER_MARK, LW__LEDGER_VERSION);
    lw_status status = lw__ledger_do(ledger, err, mark);
    for (int k = 0; status == LW_OK && k < N_FIXED; k++)
        status = lw__ledger_do(ledger, err, fixed[k][1]);
    char *sql = run_table(def->n_metrics);
    if (status == LW_OK)
        status = sql != NULL ? lw__ledger_do(ledger, err, sql)
                             : lw_error_set(err, LW_ERR_MEMORY, "no memory for a ledger");
    lw__free(sql);
    if (status == LW_OK)
        status = make_view(ledger, def, err);
    char keep[80];
    snprintf(keep, sizeof keep,
             "INSERT INTO fact (section, name, value) VALUES ('ledger', 'keep', '%d')",
             (int)def->keep);
    if (status == LW_OK)
        status = lw__ledger_do(ledger, err, keep);
    if (status == LW_OK)
        status = fill(ledger, def, err);
    return status == LW_OK ? lw__ledger_do(ledger, err, "COMMIT") : status;
}

// ---- is it one

static lw_status no_ledger(const lw_ledger *ledger, lw_error *err, const char *why)
{
    return lw_error_set(err, LW_ERR_INPUT, "%s: %s", ledger->path, why);
}

// Whether the table `name` was made by exactly this statement.
static lw_status check_table(lw_ledger *ledger, lw_error *err, const char *name, const char *sql)
{
    sqlite3_stmt *s = NULL;
    lw_status status = lw__ledger_prepare(
        ledger, err, "SELECT sql FROM sqlite_schema WHERE type = 'table' AND name = ?1", &s);
    if (status != LW_OK)
        return status;
    sqlite3_bind_text(s, 1, name, -1, SQLITE_STATIC);
    int step = sqlite3_step(s);
    const char *found = step == SQLITE_ROW ? (const char *)sqlite3_column_text(s, 0) : NULL;
    int same = found != NULL && strcmp(found, sql) == 0;
    if (step != SQLITE_ROW && step != SQLITE_DONE)
        status = lw__ledger_fault(ledger, err, "reading");
    sqlite3_finalize(s);
    if (status == LW_OK && !same)
        status = no_ledger(ledger, err, "is damaged, or no ledger: its tables are not a ledger's");
    return status;
}

static lw_status check_layout(lw_ledger *ledger, lw_error *err)
{
    int64_t n = 0;
    for (int k = 0; k < N_FIXED; k++) {
        lw_status status = check_table(ledger, err, fixed[k][0], fixed[k][1]);
        if (status != LW_OK)
            return status;
    }
    lw_status status = lw__ledger_number(ledger, err, "SELECT count(*) FROM metric", &n);
    if (status != LW_OK)
        return status;
    if (n > LW_LEDGER_MOST_METRICS)
        return no_ledger(ledger, err, "has more metrics than a ledger can hold");
    ledger->n_metrics = (int)n;
    char *sql = run_table(ledger->n_metrics);
    if (sql == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a ledger");
    status = check_table(ledger, err, "run", sql);
    lw__free(sql);
    int64_t others = 0;
    if (status == LW_OK)
        status = lw__ledger_number(ledger, err,
                                   "SELECT count(*) FROM sqlite_schema WHERE type = 'trigger' OR "
                                   "(type = 'view' AND name <> 'runs')",
                                   &others);
    if (status == LW_OK && others > 0)
        status = no_ledger(ledger, err, "holds triggers or views that no ledger has");
    return status;
}

static lw_status check_whole(lw_ledger *ledger, lw_error *err)
{
    sqlite3_stmt *s = NULL;
    lw_status status = lw__ledger_prepare(ledger, err, "PRAGMA quick_check(1)", &s);
    if (status != LW_OK)
        return status;
    int step = sqlite3_step(s);
    const char *said = step == SQLITE_ROW ? (const char *)sqlite3_column_text(s, 0) : NULL;
    if (said == NULL)
        status = lw__ledger_fault(ledger, err, "reading");
    else if (strcmp(said, "ok") != 0)
        status = lw_error_set(err, LW_ERR_INPUT, "%s: is damaged: %.200s", ledger->path, said);
    sqlite3_finalize(s);
    return status;
}

lw_status lw__ledger_verify(lw_ledger *ledger, lw_error *err)
{
    int64_t mark = 0, version = 0, keep = 0;
    lw_status status = lw__ledger_number(ledger, err, "PRAGMA application_id", &mark);
    if (status == LW_OK && mark != LW__LEDGER_MARK)
        status = no_ledger(ledger, err, "is a database, but no ledger");
    if (status == LW_OK)
        status = lw__ledger_number(ledger, err, "PRAGMA user_version", &version);
    if (status == LW_OK && version != LW__LEDGER_VERSION)
        status = lw_error_set(err, LW_ERR_INPUT,
                              "%s: is a ledger of version %lld; this program reads version %d",
                              ledger->path, (long long)version, LW__LEDGER_VERSION);
    if (status == LW_OK)
        status = check_whole(ledger, err);
    if (status == LW_OK)
        status = check_layout(ledger, err);
    if (status == LW_OK)
        status = lw__ledger_number(ledger, err,
                                   "SELECT CAST(value AS INTEGER) FROM fact "
                                   "WHERE section = 'ledger' AND name = 'keep'",
                                   &keep);
    ledger->keep = keep >= LW_KEEP_ALL && keep <= LW_KEEP_COUNTS ? (lw_keep)keep : LW_KEEP_ALL;
    return status;
}

// ---- is it this one

typedef struct comparison {
    const lw_ledger_def *def;
    int next; // fact of the definition that should come next
    lw_error *err;
    lw_status status;
    const char *path;
} comparison;

// The first line in which two texts differ, for a message.
static int first_line_apart(const char *a, const char *b, int *n_a, int *n_b, const char **at_a,
                            const char **at_b)
{
    int line = 1;
    for (;; line++) {
        size_t x = strcspn(a, "\n"), y = strcspn(b, "\n");
        if (x != y || memcmp(a, b, x) != 0 || a[x] == 0 || b[y] == 0) {
            *n_a = (int)(x < 80 ? x : 80);
            *n_b = (int)(y < 80 ? y : 80);
            *at_a = a;
            *at_b = b;
            return line;
        }
        a += x + 1;
        b += y + 1;
    }
}

static int compare_fact(void *context, const lw_fact *had)
{
    comparison *c = context;
    if (strcmp(had->section, "ledger") == 0)
        return 0;
    const lw_fact *now = c->next < c->def->n_facts ? &c->def->facts[c->next++] : NULL;
    if (now != NULL && strcmp(now->section, had->section) == 0 &&
        strcmp(now->name, had->name) == 0 && strcmp(now->value, had->value) == 0)
        return 0;
    if (now == NULL || strcmp(now->section, had->section) != 0 ||
        strcmp(now->name, had->name) != 0) {
        c->status =
            lw_error_set(c->err, LW_ERR_ARGUMENT,
                         "%s: was made by another study: it has %s \"%.*s\" where this one "
                         "has %s \"%.*s\"",
                         c->path, had->section, LW__LEDGER_TEXT / 3, had->name,
                         now ? now->section : "nothing", LW__LEDGER_TEXT / 3, now ? now->name : "");
        return 1;
    }
    int n_had, n_now;
    const char *at_had, *at_now;
    int line = first_line_apart(had->value, now->value, &n_had, &n_now, &at_had, &at_now);
    char place[40] = "";
    if (strchr(had->value, '\n') != NULL || strchr(now->value, '\n') != NULL)
        snprintf(place, sizeof place, ", line %d", line);
    c->status = lw_error_set(c->err, LW_ERR_ARGUMENT,
                             "%s: %s \"%.*s\"%s differs: the ledger has '%.*s', now it is '%.*s'",
                             c->path, had->section, LW__LEDGER_TEXT / 3, had->name, place, n_had,
                             at_had, n_now, at_now);
    return 1;
}

lw_status lw__ledger_same(lw_ledger *ledger, const lw_ledger_def *def, lw_error *err)
{
    comparison c = {.def = def, .err = err, .path = ledger->path};
    lw_status status = lw_ledger_facts(ledger, compare_fact, &c, err);
    if (status != LW_OK || c.status != LW_OK)
        return status != LW_OK ? status : c.status;
    if (c.next < def->n_facts)
        return lw_error_set(err, LW_ERR_ARGUMENT,
                            "%s: was made by another study: it lacks %s \"%.80s\"", ledger->path,
                            def->facts[c.next].section, def->facts[c.next].name);
    if (def->n_metrics != ledger->n_metrics || def->keep != ledger->keep)
        return lw_error_set(err, LW_ERR_ARGUMENT,
                            "%s: was made for other metrics, or keeps other rows", ledger->path);
    return LW_OK;
}
