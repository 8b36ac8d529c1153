// Memory: allocation that can be made to fail, and the arena.

#include "suite.h"

#include "base/alloc.h"
#include "base/arena.h"

#include <stdint.h>
#include <string.h>

// ---- allocation

START_TEST(memory_comes_zeroed)
{
    for (size_t size = 0; size < 5000; size = 2 * size + 1) {
        unsigned char *p = lw__alloc(size);
        ck_assert_ptr_nonnull(p);
        for (size_t i = 0; i < size; i++)
            ck_assert(p[i] == 0);
        lw__free(p);
    }
}
END_TEST

START_TEST(growing_keeps_what_is_there)
{
    char *p = lw__alloc(8);
    memcpy(p, "anchors", 8);
    p = lw__realloc(p, 100000);
    ck_assert_str_eq(p, "anchors");
    p = lw__realloc(p, 8);
    ck_assert_str_eq(p, "anchors");
    lw__free(p);
    p = lw__realloc(NULL, 10);
    ck_assert_ptr_nonnull(p);
    lw__free(p);
    lw__free(NULL);
}
END_TEST

START_TEST(the_nth_allocation_from_now_and_all_later_ones_fail)
{
    char *p = lw__alloc(8);
    lw__alloc_fail_after(3);
    void *first = lw__alloc(1), *second = lw__realloc(NULL, 1);
    ck_assert(first != NULL && second != NULL);
    ck_assert_ptr_null(lw__alloc(1));
    memcpy(p, "kept", 5);
    ck_assert_ptr_null(lw__realloc(p, 1000));
    ck_assert_str_eq(p, "kept"); // a failed growth leaves the old piece
    lw__alloc_fail_after(-1);
    void *again = lw__alloc(1);
    ck_assert_ptr_nonnull(again);
    lw__free(again);
    lw__free(first);
    lw__free(second);
    lw__free(p);
}
END_TEST

// ---- the arena

enum { N_PIECES = 600 };

static size_t size_of_piece(int i)
{
    return i % 97 == 5 ? 20000 : (size_t)(i * 7 % 311);
}

// Pieces filled with their number as they come: any that overlaps or moves is seen at the end.
START_TEST(pieces_are_zeroed_aligned_apart_and_stay)
{
    lw__arena *arena = lw__arena_new();
    unsigned char *pieces[N_PIECES];
    for (int i = 0; i < N_PIECES; i++) {
        size_t size = size_of_piece(i);
        pieces[i] = lw__arena_get(arena, size);
        ck_assert_ptr_nonnull(pieces[i]);
        ck_assert_uint_eq((uintptr_t)pieces[i] % 64, 0);
        for (size_t k = 0; k < size; k++)
            ck_assert(pieces[i][k] == 0);
        memset(pieces[i], i % 255 + 1, size);
    }
    for (int i = 0; i < N_PIECES; i++)
        for (size_t k = 0; k < size_of_piece(i); k++)
            ck_assert(pieces[i][k] == i % 255 + 1);
    lw__arena_free(arena);
    lw__arena_free(NULL);
}
END_TEST

START_TEST(pieces_without_length_are_apart_too)
{
    lw__arena *arena = lw__arena_new();
    ck_assert_ptr_ne(lw__arena_get(arena, 0), lw__arena_get(arena, 0));
    lw__arena_free(arena);
}
END_TEST

START_TEST(text_is_copied)
{
    lw__arena *arena = lw__arena_new();
    char text[] = "axis.current";
    char *copy = lw__arena_text(arena, text), *empty = lw__arena_text(arena, "");
    text[0] = '?';
    ck_assert_str_eq(copy, "axis.current");
    ck_assert_str_eq(empty, "");
    lw__arena_free(arena);
}
END_TEST

START_TEST(more_than_there_can_be_is_refused)
{
    lw__arena *arena = lw__arena_new();
    ck_assert_ptr_null(lw__arena_get(arena, SIZE_MAX));
    ck_assert_ptr_null(lw__arena_get(arena, SIZE_MAX - 63));
    ck_assert_ptr_nonnull(lw__arena_get(arena, 100)); // and the arena still serves
    lw__arena_free(arena);
}
END_TEST

// Under the address sanitizer a block left behind would be reported.
START_TEST(an_arena_that_cannot_grow_keeps_what_it_has)
{
    for (long n = 1; n < 12; n++) {
        lw__alloc_fail_after(n);
        lw__arena *arena = lw__arena_new();
        ck_assert_int_eq(arena == NULL, n == 1);
        if (arena == NULL)
            continue;
        unsigned char *last = NULL, *piece = lw__arena_get(arena, 3000);
        int n_got = 0;
        for (; piece != NULL && n_got < 100000; n_got++) {
            last = piece;
            piece = lw__arena_get(arena, 3000);
        }
        ck_assert_ptr_null(piece);
        ck_assert_int_eq(n_got > 0, n > 2);
        if (last != NULL)
            memset(last, 1, 3000);
        lw__alloc_fail_after(-1);
        lw__arena_free(arena);
    }
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("memory");
    TCase *alloc = tcase_create("allocation"), *arena = tcase_create("arena");
    tcase_add_test(alloc, memory_comes_zeroed);
    tcase_add_test(alloc, growing_keeps_what_is_there);
    tcase_add_test(alloc, the_nth_allocation_from_now_and_all_later_ones_fail);
    tcase_add_test(arena, pieces_are_zeroed_aligned_apart_and_stay);
    tcase_add_test(arena, pieces_without_length_are_apart_too);
    tcase_add_test(arena, text_is_copied);
    tcase_add_test(arena, more_than_there_can_be_is_refused);
    tcase_add_test(arena, an_arena_that_cannot_grow_keeps_what_it_has);
    suite_add_tcase(suite, alloc);
    suite_add_tcase(suite, arena);
    return run_suite(suite);
}
