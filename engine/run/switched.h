// Systems that are linear between switchings: x' = A x + B u + k of the mode at hand, and from mode
// to mode where a condition linear in x and u comes true.
//
// In a mode, the solution over a short time is a Taylor polynomial to rounding; conditions are rows
// of it, and their roots are the instants of switching, real numbers of seconds since the anchor.
#ifndef LATEWOOD_RUN_SWITCHED_H
#define LATEWOOD_RUN_SWITCHED_H

#include <latewood/status.h>
#include <latewood/time.h>

#define LW__SWITCHED_DEGREE 16
#define LW__SWITCHED_REACH 0.5 // balanced norm(A) times the length of a piece at most

// Out of a mode: where condition `row` is at or above zero, and `only_if` too if that is not -1.
typedef struct lw__switching {
    int row, only_if; // rows of conditions
    int to;
    int first_x, n_x; // states that jump; n_x 0: none
    const double *r;  // n_x x n_x, row-major: x -> r x + r0
    const double *r0; // n_x
} lw__switching;

typedef struct lw__mode {
    const double *a, *b, *k; // column-major n x n, n x m; n
    const double *c, *d, *e; // rows, row-major: n_rows x n, n_rows x m; n_rows
    double piece;            // longest piece [s]
    int n_switchings;
    const lw__switching *switchings; // the first that holds is taken
} lw__mode;

// Rows are outputs and states of the group, conditions among them.
typedef struct lw__switched {
    int n, m, n_rows, n_modes, n_conditions;
    const int *condition_row; // n_conditions: row of each condition
    const lw__mode *modes;
} lw__switched;

// What moves. Times count from the anchor.
typedef struct lw__switched_state {
    double *x;     // n
    double *noise; // n_conditions: what rounding may have left in the value of each
    int mode;
    lw_tick anchor;
    lw_tick switched_at; // tick of the last switching, rounded down
    int64_t in_a_row;    // switchings each within 1 ns of the one before
    int64_t n_switchings;
} lw__switched_state;

// A piece: the solution over [begin, end] is the sum of v_k s^k, s from 0 to 1.
typedef struct lw__switched_piece {
    const lw__switched *system;
    int mode;
    double begin, end;
    const double *v; // (LW__SWITCHED_DEGREE + 1) x n
    const double *u;
} lw__switched_piece;

typedef void (*lw__take_piece)(void *context, const lw__switched_piece *piece);

// Move from `from` to `to` [s since the anchor] under inputs u (m), switching where conditions come
// true; those that are true at the start switch there, those that become so at the end do not yet.
// Pieces go to `take` (may be NULL) in order of time. LW_ERR_CHATTER: 1000 switchings in a row
// within 1 ns of one another; LW_ERR_NOT_FINITE; *failed is the instant. work:
// lw__switched_work(system).
lw_status lw__switched_advance(const lw__switched *q, lw__switched_state *s, const double *u,
                               double from, double to, lw__take_piece take, void *context,
                               double *work, double *failed);
// Switch for as long as conditions hold at the instant `at`.
lw_status lw__switched_settle(const lw__switched *q, lw__switched_state *s, const double *u,
                              double at, double *work);
int lw__switched_work(const lw__switched *q);

// A row at state x, and its polynomial over a piece (constant first); returns the degree.
double lw__switched_row(const lw__switched *q, int mode, int row, const double *x, const double *u);
int lw__switched_series(const lw__switched_piece *piece, int row, double *c);

#endif
