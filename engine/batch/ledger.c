// The ledger as a file: opening, adding rows, committing, reading.
//
// Workload: a million rows a batch in transactions of some thousand; one writer. Rollback journal
// and full synchronisation, which also work on network disks.
//
// Invariants
// 1. What is committed stays: an interruption at any moment leaves a ledger that can be gone on
//    with, and that lacks at most what was not committed.
// 2. Content depends on rows and facts alone, not on the order in which rows came.

#include "batch/ledger_file.h"

#include "base/alloc.h"

#include <errno.h>
#include <math.h>
#include <stdio.h>
#include <string.h>
#include <unistd.h>

// ---- statements

lw_status lw__ledger_fault(const lw_ledger *ledger, lw_error *err, const char *doing)
{
    int code = sqlite3_errcode(ledger->db);
    const char *why = sqlite3_errmsg(ledger->db);
    if (code == SQLITE_BUSY || code == SQLITE_LOCKED)
        return lw_error_set(err, LW_ERR_OUTPUT, "%s: is in use by another process", ledger->path);
    if (code == SQLITE_NOTADB)
        return lw_error_set(err, LW_ERR_INPUT, "%s: is no ledger", ledger->path);
    if (code == SQLITE_CORRUPT)
        return lw_error_set(err, LW_ERR_INPUT, "%s: is damaged", ledger->path);
    if (code == SQLITE_NOMEM)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a ledger");
    return lw_error_set(err, LW_ERR_OUTPUT, "%s: %s failed: %s", ledger->path, doing, why);
}

lw_status lw__ledger_do(lw_ledger *ledger, lw_error *err, const char *sql)
{
    return sqlite3_exec(ledger->db, sql, NULL, NULL, NULL) == SQLITE_OK
               ? LW_OK
               : lw__ledger_fault(ledger, err, "access");
}

lw_status lw__ledger_prepare(lw_ledger *ledger, lw_error *err, const char *sql, sqlite3_stmt **out)
{
    return sqlite3_prepare_v2(ledger->db, sql, -1, out, NULL) == SQLITE_OK
               ? LW_OK
               : lw__ledger_fault(ledger, err, "access");
}

lw_status lw__ledger_number(lw_ledger *ledger, lw_error *err, const char *sql, int64_t *out)
{
    sqlite3_stmt *s = NULL;
    lw_status status = lw__ledger_prepare(ledger, err, sql, &s);
    if (status != LW_OK)
        return status;
    int step = sqlite3_step(s);
    if (step == SQLITE_ROW)
        *out = sqlite3_column_int64(s, 0);
    else
        status = step == SQLITE_DONE
                     ? lw_error_set(err, LW_ERR_INPUT, "%s: is damaged", ledger->path)
                     : lw__ledger_fault(ledger, err, "reading");
    sqlite3_finalize(s);
    return status;
}

// ---- opening and closing

lw_status lw__ledger_connect(const char *path, int flags, lw_ledger **out, lw_error *err)
{
    lw_ledger *ledger = lw__alloc(sizeof *ledger);
    char *copy = ledger != NULL ? lw__alloc(strlen(path) + 1) : NULL;
    if (copy == NULL) {
        lw__free(ledger);
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a ledger");
    }
    ledger->path = strcpy(copy, path);
    lw_status status = LW_OK;
    if (sqlite3_open_v2(path, &ledger->db, flags, NULL) != SQLITE_OK)
        status = ledger->db == NULL
                     ? lw_error_set(err, LW_ERR_MEMORY, "no memory for a ledger")
                     : lw_error_set(err, LW_ERR_INPUT, "%s: cannot be opened: %s", path,
                                    access(path, F_OK) != 0 ? strerror(errno)
                                                            : sqlite3_errmsg(ledger->db));
    if (status == LW_OK) {
        sqlite3_db_config(ledger->db, SQLITE_DBCONFIG_DEFENSIVE, 1, NULL);
        sqlite3_db_config(ledger->db, SQLITE_DBCONFIG_TRUSTED_SCHEMA, 0, NULL);
        sqlite3_db_config(ledger->db, SQLITE_DBCONFIG_ENABLE_TRIGGER, 0, NULL);
        sqlite3_extended_result_codes(ledger->db, 0);
        status = lw__ledger_do(ledger, err,
                               "PRAGMA journal_mode=DELETE; PRAGMA synchronous=FULL;"
                               "PRAGMA cell_size_check=ON; PRAGMA mmap_size=0");
    }
    if (status != LW_OK) {
        lw_ledger_close(ledger);
        return status;
    }
    *out = ledger;
    return LW_OK;
}

void lw_ledger_close(lw_ledger *ledger)
{
    if (ledger == NULL)
        return;
    sqlite3_stmt *all[] = {ledger->add,  ledger->find, ledger->ended,
                           ledger->mark, ledger->look, ledger->count};
    for (size_t k = 0; k < sizeof all / sizeof all[0]; k++)
        sqlite3_finalize(all[k]);
    for (int k = 0; k < ledger->n_limits; k++)
        lw__free((char *)(uintptr_t)ledger->limits[k].name);
    lw__free(ledger->limits);
    lw__free(ledger->n_missed);
    sqlite3_close(ledger->db);
    lw__free(ledger->path);
    lw__free(ledger);
}

static lw_status check_def(const lw_ledger_def *def, lw_error *err)
{
    if (def->path != NULL && def->path[0] == 0)
        return lw_error_set(err, LW_ERR_ARGUMENT, "the ledger has no path");
    if (def->n_metrics < 0 || def->n_metrics > LW_LEDGER_MOST_METRICS)
        return lw_error_set(err, LW_ERR_ARGUMENT, "a ledger of %d metrics; permitted 0 to %d",
                            def->n_metrics, LW_LEDGER_MOST_METRICS);
    return LW_OK;
}

// Give the finished file its name, unless a file of that name has come into being.
static lw_status give_name(const char *from, const char *to, lw_error *err)
{
    int linked = link(from, to) == 0, exists = errno == EEXIST;
    if (!linked && !exists && access(to, F_OK) != 0) // a file system without links
        return rename(from, to) == 0 ? LW_OK
                                     : lw_error_set(err, LW_ERR_OUTPUT, "%s: cannot be created: %s",
                                                    to, strerror(errno));
    unlink(from);
    return linked ? LW_OK : lw_error_set(err, LW_ERR_DUPLICATE, "%s: the file exists", to);
}

lw_status lw_ledger_create(const lw_ledger_def *def, lw_error *err)
{
    lw_status status = check_def(def, err);
    if (status != LW_OK)
        return status;
    if (def->path == NULL)
        return LW_OK;
    if (access(def->path, F_OK) == 0)
        return lw_error_set(err, LW_ERR_DUPLICATE, "%s: the file exists", def->path);
    size_t room = strlen(def->path) + 40;
    char *own = lw__alloc(room);
    if (own == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a ledger");
    snprintf(own, room, "%s.new-%ld", def->path, (long)getpid());
    unlink(own);
    lw_ledger *ledger = NULL;
    status = lw__ledger_connect(own, SQLITE_OPEN_READWRITE | SQLITE_OPEN_CREATE, &ledger, err);
    if (status == LW_ERR_INPUT && err != NULL)
        err->status = LW_ERR_OUTPUT;
    status = status == LW_ERR_INPUT ? LW_ERR_OUTPUT : status;
    if (status == LW_OK)
        status = lw__ledger_lay_out(ledger, def, err);
    lw_ledger_close(ledger);
    if (status == LW_OK)
        status = give_name(own, def->path, err);
    else
        unlink(own);
    lw__free(own);
    return status;
}

lw_status lw_ledger_open(const char *path, lw_ledger **out, lw_error *err)
{
    lw_ledger *ledger = NULL;
    lw_status status = lw__ledger_connect(path, SQLITE_OPEN_READONLY, &ledger, err);
    if (status == LW_OK)
        status = lw__ledger_verify(ledger, err);
    if (status != LW_OK) {
        lw_ledger_close(ledger);
        return status;
    }
    *out = ledger;
    return LW_OK;
}

// ---- going on

static lw_status keep_limits(lw_ledger *ledger, const lw_ledger_def *def, lw_error *err)
{
    size_t n = (size_t)def->n_limits;
    ledger->limits = lw__alloc(sizeof *ledger->limits * (n + 1));
    ledger->n_missed = lw__alloc(sizeof *ledger->n_missed * (n + 1));
    if (ledger->limits == NULL || ledger->n_missed == NULL)
        return lw_error_set(err, LW_ERR_MEMORY, "no memory for a ledger");
    for (size_t k = 0; k < n; k++) {
        char *name = lw__alloc(strlen(def->limits[k].name) + 1);
        if (name == NULL)
            return lw_error_set(err, LW_ERR_MEMORY, "no memory for a ledger");
        ledger->limits[k] = def->limits[k];
        ledger->limits[k].name = strcpy(name, def->limits[k].name);
        ledger->n_limits++;
    }
    return LW_OK;
}

static lw_status prepare_all(lw_ledger *ledger, lw_error *err)
{
    sqlite3_str *add = sqlite3_str_new(ledger->db), *find = sqlite3_str_new(ledger->db);
    sqlite3_str_appendall(add, "INSERT INTO run VALUES (?1, ?2, ?3");
    sqlite3_str_appendall(find, "SELECT status");
    for (int k = 0; k < ledger->n_metrics; k++) {
        sqlite3_str_appendf(add, ", ?%d", k + 4);
        sqlite3_str_appendf(find, ", v%d", k + 1);
    }
    sqlite3_str_appendall(add, ")");
    sqlite3_str_appendall(find, " FROM run WHERE point = ?1 AND run = ?2");
    char *add_text = sqlite3_str_finish(add), *find_text = sqlite3_str_finish(find);
    const struct {
        const char *sql;
        sqlite3_stmt **out;
    } all[] = {{add_text, &ledger->add},
               {find_text, &ledger->find},
               {"INSERT INTO ended VALUES (?1, ?2, ?3, ?4)", &ledger->ended},
               {"INSERT INTO done VALUES (?1, ?2, ?3) ON CONFLICT DO UPDATE SET mask = mask | ?3",
                &ledger->mark},
               {"SELECT mask FROM done WHERE point = ?1 AND block = ?2", &ledger->look},
               {"INSERT INTO tally VALUES (?1, ?2, ?3) "
                "ON CONFLICT DO UPDATE SET count = count + ?3",
                &ledger->count}};
    lw_status status = add_text == NULL || find_text == NULL
                           ? lw_error_set(err, LW_ERR_MEMORY, "no memory for a ledger")
                           : LW_OK;
    for (size_t k = 0; status == LW_OK && k < sizeof all / sizeof all[0]; k++)
        status = lw__ledger_prepare(ledger, err, all[k].sql, all[k].out);
    sqlite3_free(add_text);
    sqlite3_free(find_text);
    return status;
}

// The file of a definition, locked for others and found to be what was made for it.
static lw_status open_file(const lw_ledger_def *def, lw_ledger **out, lw_error *err)
{
    lw_status status = lw__ledger_connect(def->path, SQLITE_OPEN_READWRITE, out, err);
    if (status == LW_OK && sqlite3_db_readonly((*out)->db, "main"))
        status = lw_error_set(err, LW_ERR_OUTPUT, "%s: is not writable", def->path);
    if (status == LW_OK)
        status = lw__ledger_do(*out, err, "PRAGMA locking_mode=EXCLUSIVE; BEGIN EXCLUSIVE; COMMIT");
    if (status == LW_OK)
        status = lw__ledger_verify(*out, err);
    return status == LW_OK ? lw__ledger_same(*out, def, err) : status;
}

// A ledger that lives as long as it is open.
static lw_status open_memory(const lw_ledger_def *def, lw_ledger **out, lw_error *err)
{
    lw_status status =
        lw__ledger_connect(":memory:", SQLITE_OPEN_READWRITE | SQLITE_OPEN_CREATE, out, err);
    if (status == LW_OK)
        status = lw__ledger_lay_out(*out, def, err);
    if (status != LW_OK)
        return status;
    (*out)->n_metrics = def->n_metrics;
    (*out)->keep = def->keep;
    return LW_OK;
}

lw_status lw_ledger_resume(const lw_ledger_def *def, lw_ledger **out, lw_error *err)
{
    lw_ledger *ledger = NULL;
    lw_status status = check_def(def, err);
    if (status == LW_OK)
        status = (def->path != NULL ? open_file : open_memory)(def, &ledger, err);
    if (status == LW_OK)
        status = keep_limits(ledger, def, err);
    if (status == LW_OK)
        status = prepare_all(ledger, err);
    if (status == LW_OK)
        status = lw__ledger_do(ledger, err, "BEGIN");
    if (status != LW_OK) {
        lw_ledger_close(ledger);
        return status;
    }
    ledger->writing = 1;
    ledger->point = ledger->block = -1;
    *out = ledger;
    return LW_OK;
}

// ---- adding

static lw_status step_done(lw_ledger *ledger, sqlite3_stmt *s, lw_error *err)
{
    int step = sqlite3_step(s);
    lw_status status = step == SQLITE_DONE ? LW_OK : lw__ledger_fault(ledger, err, "writing");
    sqlite3_reset(s);
    return status;
}

static lw_status add_count(lw_ledger *ledger, const char *name, int64_t *count, lw_error *err)
{
    sqlite3_bind_int64(ledger->count, 1, ledger->point);
    sqlite3_bind_text(ledger->count, 2, name, -1, SQLITE_STATIC);
    sqlite3_bind_int64(ledger->count, 3, *count);
    *count = 0;
    return step_done(ledger, ledger->count, err);
}

// Bring into the file what was counted of the present block.
static lw_status flush_block(lw_ledger *ledger, lw_error *err)
{
    if (!ledger->pending)
        return LW_OK;
    ledger->pending = 0;
    sqlite3_bind_int64(ledger->mark, 1, ledger->point);
    sqlite3_bind_int64(ledger->mark, 2, ledger->block);
    sqlite3_bind_int64(ledger->mark, 3, (int64_t)ledger->mask);
    lw_status status = step_done(ledger, ledger->mark, err);
    if (status == LW_OK)
        status = add_count(ledger, "runs", &ledger->n_runs, err);
    if (status == LW_OK)
        status = add_count(ledger, "ended early", &ledger->n_ended, err);
    for (int k = 0; status == LW_OK && k < ledger->n_limits; k++)
        status = add_count(ledger, ledger->limits[k].name, &ledger->n_missed[k], err);
    return status;
}

static lw_status look_up_block(lw_ledger *ledger, int64_t point, int64_t block, uint64_t *mask,
                               lw_error *err)
{
    *mask = 0;
    sqlite3_bind_int64(ledger->look, 1, point);
    sqlite3_bind_int64(ledger->look, 2, block);
    int step = sqlite3_step(ledger->look);
    if (step == SQLITE_ROW)
        *mask = (uint64_t)sqlite3_column_int64(ledger->look, 0);
    lw_status status = step == SQLITE_ROW || step == SQLITE_DONE
                           ? LW_OK
                           : lw__ledger_fault(ledger, err, "reading");
    sqlite3_reset(ledger->look);
    return status;
}

static lw_status enter_block(lw_ledger *ledger, int64_t point, int64_t block, lw_error *err)
{
    if (ledger->point == point && ledger->block == block)
        return LW_OK;
    lw_status status = flush_block(ledger, err);
    ledger->point = point;
    ledger->block = block;
    return status == LW_OK ? look_up_block(ledger, point, block, &ledger->mask, err) : status;
}

static int misses(const lw_ledger_limit *limit, const lw_ledger_row *row)
{
    double v = row->status == LW_OK ? row->values[limit->metric] : (double)NAN;
    if (limit->kind == LW_LIMIT_DEFINED)
        return row->status == LW_OK && isnan(v);
    return !(limit->kind == LW_LIMIT_AT_LEAST ? v >= limit->limit : v <= limit->limit);
}

static int same_value(double a, double b)
{
    return a == b || (isnan(a) && isnan(b));
}

// A run that is there already: equal content or an error that names it.
static lw_status check_again(lw_ledger *ledger, const lw_ledger_row *row, lw_error *err)
{
    if (ledger->keep != LW_KEEP_ALL)
        return LW_OK;
    sqlite3_bind_int64(ledger->find, 1, row->point);
    sqlite3_bind_int64(ledger->find, 2, row->run);
    int step = sqlite3_step(ledger->find);
    int same = step == SQLITE_ROW && sqlite3_column_int(ledger->find, 0) == (int)row->status;
    for (int k = 0; same && row->status == LW_OK && k < ledger->n_metrics; k++) {
        int none = sqlite3_column_type(ledger->find, k + 1) == SQLITE_NULL;
        same = same_value(none ? (double)NAN : sqlite3_column_double(ledger->find, k + 1),
                          row->values[k]);
    }
    lw_status status = LW_OK;
    if (step != SQLITE_ROW && step != SQLITE_DONE)
        status = lw__ledger_fault(ledger, err, "reading");
    else if (!same)
        status = lw_error_set(err, LW_ERR_DUPLICATE,
                              "%s: run %lld of point %lld is there with other values", ledger->path,
                              (long long)row->run, (long long)row->point);
    sqlite3_reset(ledger->find);
    return status;
}

static lw_status write_row(lw_ledger *ledger, const lw_ledger_row *row, lw_error *err)
{
    sqlite3_bind_int64(ledger->add, 1, row->point);
    sqlite3_bind_int64(ledger->add, 2, row->run);
    sqlite3_bind_int(ledger->add, 3, (int)row->status);
    for (int k = 0; k < ledger->n_metrics; k++)
        sqlite3_bind_double(ledger->add, k + 4,
                            row->status == LW_OK ? row->values[k] : (double)NAN);
    lw_status status = step_done(ledger, ledger->add, err);
    if (status != LW_OK || row->status == LW_OK)
        return status;
    sqlite3_bind_int64(ledger->ended, 1, row->point);
    sqlite3_bind_int64(ledger->ended, 2, row->run);
    sqlite3_bind_double(ledger->ended, 3, isnan(row->instant) ? -1 : row->instant);
    sqlite3_bind_text(ledger->ended, 4, row->text != NULL ? row->text : "", -1, SQLITE_TRANSIENT);
    return step_done(ledger, ledger->ended, err);
}

lw_status lw_ledger_add(lw_ledger *ledger, const lw_ledger_row *row, lw_error *err)
{
    if (!ledger->writing || row->point < 0 || row->run < 0)
        return lw_error_set(err, LW_ERR_ARGUMENT, "%s: run %lld of point %lld cannot be added",
                            ledger->path, (long long)row->run, (long long)row->point);
    lw_status status = enter_block(ledger, row->point, row->run / LW_LEDGER_BLOCK, err);
    if (status != LW_OK)
        return status;
    uint64_t bit = UINT64_C(1) << (row->run % LW_LEDGER_BLOCK);
    if (ledger->mask & bit)
        return check_again(ledger, row, err);
    int failed = row->status != LW_OK;
    for (int k = 0; k < ledger->n_limits; k++) {
        int missed = misses(&ledger->limits[k], row);
        ledger->n_missed[k] += missed;
        failed |= missed;
    }
    ledger->mask |= bit;
    ledger->pending = 1;
    ledger->n_runs++;
    ledger->n_ended += row->status != LW_OK;
    int kept = ledger->keep == LW_KEEP_ALL || (ledger->keep == LW_KEEP_FAILURES && failed);
    return kept ? write_row(ledger, row, err) : LW_OK;
}

lw_status lw_ledger_commit(lw_ledger *ledger, lw_error *err)
{
    lw_status status = flush_block(ledger, err);
    return status == LW_OK ? lw__ledger_do(ledger, err, "COMMIT; BEGIN") : status;
}

lw_status lw_ledger_point(lw_ledger *ledger, int64_t number, const char *name, const char *text,
                          lw_error *err)
{
    sqlite3_stmt *s = NULL;
    lw_status status = lw__ledger_prepare(
        ledger, err,
        "INSERT INTO point VALUES (?1, ?2, ?3) ON CONFLICT DO UPDATE SET number = ?1 "
        "WHERE name = ?2 AND parameters = ?3",
        &s);
    if (status != LW_OK)
        return status;
    sqlite3_bind_int64(s, 1, number);
    sqlite3_bind_text(s, 2, name, -1, SQLITE_STATIC);
    sqlite3_bind_text(s, 3, text, -1, SQLITE_STATIC);
    if (sqlite3_step(s) != SQLITE_DONE)
        status = lw__ledger_fault(ledger, err, "writing");
    sqlite3_finalize(s);
    if (status == LW_OK && sqlite3_changes(ledger->db) == 0)
        status =
            lw_error_set(err, LW_ERR_ARGUMENT, "%s: point %lld is another than \"%.120s\" (%.120s)",
                         ledger->path, (long long)number, name, text);
    return status;
}

lw_status lw_ledger_provenance(lw_ledger *ledger, const char *name, const char *value,
                               lw_error *err)
{
    sqlite3_stmt *s = NULL;
    lw_status status = lw__ledger_prepare(ledger, err,
                                          "INSERT INTO provenance VALUES ((SELECT count(*) FROM "
                                          "provenance WHERE name = ?1) + 1, ?1, ?2)",
                                          &s);
    if (status != LW_OK)
        return status;
    sqlite3_bind_text(s, 1, name, -1, SQLITE_STATIC);
    sqlite3_bind_text(s, 2, value, -1, SQLITE_STATIC);
    if (sqlite3_step(s) != SQLITE_DONE)
        status = lw__ledger_fault(ledger, err, "writing");
    sqlite3_finalize(s);
    return status;
}

// ---- reading

lw_status lw_ledger_done(lw_ledger *ledger, int64_t point, int64_t block, uint64_t *mask,
                         lw_error *err)
{
    if (ledger->look == NULL) {
        lw_status status = lw__ledger_prepare(
            ledger, err, "SELECT mask FROM done WHERE point = ?1 AND block = ?2", &ledger->look);
        if (status != LW_OK)
            return status;
    }
    if (ledger->pending && ledger->point == point && ledger->block == block) {
        *mask = ledger->mask;
        return LW_OK;
    }
    return look_up_block(ledger, point, block, mask, err);
}

int lw_ledger_n_metrics(const lw_ledger *ledger)
{
    return ledger->n_metrics;
}

lw_keep lw_ledger_kept(const lw_ledger *ledger)
{
    return ledger->keep;
}

static const char *text_of(sqlite3_stmt *s, int column)
{
    const char *text = (const char *)sqlite3_column_text(s, column);
    return text != NULL ? text : "";
}

static void read_row(const lw_ledger *ledger, sqlite3_stmt *s, double *values, lw_ledger_row *row)
{
    row->run = sqlite3_column_int64(s, 0);
    row->status = (lw_status)sqlite3_column_int(s, 1);
    row->instant =
        sqlite3_column_type(s, 2) == SQLITE_NULL ? (double)NAN : sqlite3_column_double(s, 2);
    row->text = text_of(s, 3);
    for (int k = 0; k < ledger->n_metrics; k++)
        values[k] = sqlite3_column_type(s, k + 4) == SQLITE_NULL ? (double)NAN
                                                                 : sqlite3_column_double(s, k + 4);
}

lw_status lw_ledger_rows(lw_ledger *ledger, int64_t point,
                         int (*take)(void *context, const lw_ledger_row *row), void *context,
                         lw_error *err)
{
    sqlite3_str *sql = sqlite3_str_new(ledger->db);
    sqlite3_str_appendall(sql, "SELECT run.run, run.status, ended.instant, ended.text");
    for (int k = 0; k < ledger->n_metrics; k++)
        sqlite3_str_appendf(sql, ", v%d", k + 1);
    sqlite3_str_appendall(sql, " FROM run LEFT JOIN ended ON ended.point = run.point AND "
                               "ended.run = run.run WHERE run.point = ?1 ORDER BY run.run");
    char *text = sqlite3_str_finish(sql);
    double *values = lw__alloc(sizeof *values * (size_t)(ledger->n_metrics + 1));
    sqlite3_stmt *s = NULL;
    lw_status status = text == NULL || values == NULL
                           ? lw_error_set(err, LW_ERR_MEMORY, "no memory for a ledger")
                           : lw__ledger_prepare(ledger, err, text, &s);
    if (status == LW_OK) {
        sqlite3_bind_int64(s, 1, point);
        int step, stop = 0;
        while (!stop && (step = sqlite3_step(s)) == SQLITE_ROW) {
            lw_ledger_row row = {.point = point, .values = values};
            read_row(ledger, s, values, &row);
            stop = take(context, &row);
        }
        if (!stop && step != SQLITE_DONE)
            status = lw__ledger_fault(ledger, err, "reading");
    }
    sqlite3_finalize(s);
    sqlite3_free(text);
    lw__free(values);
    return status;
}

lw_status lw_ledger_tally(lw_ledger *ledger, int64_t point, const char *name, int64_t *count,
                          lw_error *err)
{
    sqlite3_stmt *s = NULL;
    lw_status status = ledger->writing ? flush_block(ledger, err) : LW_OK;
    if (status == LW_OK)
        status = lw__ledger_prepare(ledger, err,
                                    "SELECT count FROM tally WHERE point = ?1 AND name = ?2", &s);
    if (status != LW_OK)
        return status;
    sqlite3_bind_int64(s, 1, point);
    sqlite3_bind_text(s, 2, name, -1, SQLITE_STATIC);
    int step = sqlite3_step(s);
    *count = step == SQLITE_ROW ? sqlite3_column_int64(s, 0) : 0;
    if (step != SQLITE_ROW && step != SQLITE_DONE)
        status = lw__ledger_fault(ledger, err, "reading");
    sqlite3_finalize(s);
    return status;
}

// Walk the rows of a query.
typedef int (*take_row)(void *context, sqlite3_stmt *s);

static lw_status walk(lw_ledger *ledger, const char *sql, take_row take, void *context,
                      lw_error *err)
{
    sqlite3_stmt *s = NULL;
    lw_status status = lw__ledger_prepare(ledger, err, sql, &s);
    if (status != LW_OK)
        return status;
    int step = SQLITE_DONE, stop = 0;
    while (!stop && (step = sqlite3_step(s)) == SQLITE_ROW)
        stop = take(context, s);
    if (!stop && step != SQLITE_DONE)
        status = lw__ledger_fault(ledger, err, "reading");
    sqlite3_finalize(s);
    return status;
}

typedef struct taker {
    int (*fact)(void *context, const lw_fact *fact);
    int (*point)(void *context, int64_t number, const char *name, const char *text);
    int (*metric)(void *context, const lw_ledger_metric *metric);
    void *context;
} taker;

static int take_fact(void *context, sqlite3_stmt *s)
{
    const taker *t = context;
    return t->fact(t->context, &(lw_fact){text_of(s, 0), text_of(s, 1), text_of(s, 2)});
}

static int take_point(void *context, sqlite3_stmt *s)
{
    const taker *t = context;
    return t->point(t->context, sqlite3_column_int64(s, 0), text_of(s, 1), text_of(s, 2));
}

static int take_metric(void *context, sqlite3_stmt *s)
{
    const taker *t = context;
    return t->metric(t->context, &(lw_ledger_metric){text_of(s, 0), text_of(s, 1)});
}

lw_status lw_ledger_facts(lw_ledger *ledger, int (*take)(void *context, const lw_fact *fact),
                          void *context, lw_error *err)
{
    taker t = {.fact = take, .context = context};
    return walk(ledger, "SELECT section, name, value FROM fact ORDER BY number", take_fact, &t,
                err);
}

lw_status lw_ledger_points(lw_ledger *ledger,
                           int (*take)(void *context, int64_t number, const char *name,
                                       const char *text),
                           void *context, lw_error *err)
{
    taker t = {.point = take, .context = context};
    return walk(ledger, "SELECT number, name, parameters FROM point ORDER BY number", take_point,
                &t, err);
}

lw_status lw_ledger_metrics(lw_ledger *ledger,
                            int (*take)(void *context, const lw_ledger_metric *metric),
                            void *context, lw_error *err)
{
    taker t = {.metric = take, .context = context};
    return walk(ledger, "SELECT name, unit FROM metric ORDER BY number", take_metric, &t, err);
}
