// SHA-256 against the examples of its standard.

#include "suite.h"

#include <latewood/hash.h>
#include <string.h>

static const char *hash_of(const char *text, size_t step)
{
    static char out[65];
    lw_hash h = lw_hash_begin();
    for (size_t at = 0, n = strlen(text); at < n; at += step)
        lw_hash_add(&h, text + at, at + step < n ? step : n - at);
    return lw_hash_text(&h, out);
}

// FIPS 180-4's companion examples (from memory): "abc", the empty text, 56 bytes.
START_TEST(hashes_are_those_of_the_standard)
{
    ck_assert_str_eq(hash_of("abc", 64),
                     "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad");
    ck_assert_str_eq(hash_of("", 1),
                     "e3b0c44298fc1c149afbf4c8996fb92427ae41e4649b934ca495991b7852b855");
    ck_assert_str_eq(hash_of("abcdbcdecdefdefgefghfghighijhijkijkljklmklmnlmnomnopnopq", 64),
                     "248d6a61d20638b8e5c026930c3e6039a33ce45964ff2167f6ecedd419db06c1");
}
END_TEST

START_TEST(a_million_letters_in_pieces_of_any_length)
{
    static const size_t steps[] = {1, 63, 64, 65, 1000};
    static char text[1000001];
    memset(text, 'a', 1000000);
    for (size_t k = 0; k < sizeof steps / sizeof *steps; k++)
        ck_assert_str_eq(hash_of(text, steps[k]),
                         "cdc76e5c9914fb9281a1c7e284d73e67f1809a48a497200e046d39ccc7112cd0");
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("hash");
    TCase *c = tcase_create("sha256");
    tcase_add_test(c, hashes_are_those_of_the_standard);
    tcase_add_test(c, a_million_letters_in_pieces_of_any_length);
    suite_add_tcase(suite, c);
    return run_suite(suite);
}
