// Status codes, messages, nearest names, and the checks of text and names.

#include "suite.h"

#include "base/text.h"

#include <latewood/status.h>
#include <limits.h>
#include <string.h>

// ---- codes

static const struct {
    lw_status status;
    const char *name;
    int value;
} codes[] = {
#define CODE(name, value, text) {name, #name, value},
    LW_STATUS_LIST(CODE)
#undef CODE
};
enum { N_CODES = sizeof codes / sizeof codes[0] };

START_TEST(a_status_is_named_as_in_the_header_and_has_a_meaning)
{
    for (int i = 0; i < N_CODES; i++) {
        ck_assert_str_eq(lw_status_name(codes[i].status), codes[i].name);
        ck_assert_uint_gt(strlen(lw_status_text(codes[i].status)), 3);
        for (int j = 0; j < i; j++)
            ck_assert_str_ne(lw_status_text(codes[i].status), lw_status_text(codes[j].status));
    }
}
END_TEST

START_TEST(failures_are_negative_and_only_a_stop_is_positive)
{
    ck_assert_int_eq(LW_OK, 0);
    ck_assert_int_gt(LW_STOPPED, 0);
    for (int i = 0; i < N_CODES; i++)
        ck_assert_int_eq(codes[i].value < 0, strncmp(codes[i].name, "LW_ERR_", 7) == 0);
}
END_TEST

START_TEST(an_unknown_status_still_has_a_name)
{
    ck_assert_ptr_nonnull(lw_status_name((lw_status)-99));
    ck_assert_ptr_nonnull(lw_status_text((lw_status)77));
}
END_TEST

// ---- messages

START_TEST(a_message_is_kept_and_its_status_returned)
{
    lw_error err = {LW_OK, ""};
    ck_assert_int_eq(lw_error_set(&err, LW_ERR_ARGUMENT, "bits is %d; permitted 1 to %d", 99, 32),
                     LW_ERR_ARGUMENT);
    ck_assert_int_eq(err.status, LW_ERR_ARGUMENT);
    ck_assert_str_eq(err.text, "bits is 99; permitted 1 to 32");
    ck_assert_int_eq(lw_error_set(NULL, LW_ERR_UNIT, "nobody asks"), LW_ERR_UNIT);
}
END_TEST

START_TEST(a_prefix_goes_before_the_message_and_leaves_the_status)
{
    lw_error err = {LW_OK, ""};
    lw_error_set(&err, LW_ERR_ARGUMENT, "bits is 99");
    lw_error_prefix(&err, "%s \"%s\": ", "adc", "current");
    ck_assert_str_eq(err.text, "adc \"current\": bits is 99");
    ck_assert_int_eq(err.status, LW_ERR_ARGUMENT);
    lw_error_prefix(NULL, "nobody asks");
}
END_TEST

START_TEST(arguments_may_point_into_the_message)
{
    lw_error err = {LW_OK, ""};
    lw_error_set(&err, LW_ERR_NAME, "first");
    lw_error_set(&err, LW_ERR_NAME, "<%s> and <%s>", err.text, err.text + 2);
    ck_assert_str_eq(err.text, "<first> and <rst>");
    lw_error_prefix(&err, "%s | ", err.text);
    ck_assert_str_eq(err.text, "<first> and <rst> | <first> and <rst>");
}
END_TEST

// Every length around the end of the buffer, with a character of two, three and four bytes there.
START_TEST(a_long_message_is_cut_between_characters)
{
    static const char *const characters[] = {"\xC2\xB5", "\xE2\x84\xA6", "\xF0\x9F\x94\xAD"};
    char text[3 * LW_ERROR_TEXT];
    lw_error err;
    for (int c = 0; c < 3; c++)
        for (size_t lead = 0; lead < 8; lead++) {
            memset(text, 'x', lead);
            text[lead] = 0;
            while (strlen(text) < 2 * LW_ERROR_TEXT)
                strcat(text, characters[c]);
            lw_error_set(&err, LW_ERR_NAME, "%s", text);
            size_t length = strlen(err.text);
            ck_assert(length < LW_ERROR_TEXT && length + 4 >= LW_ERROR_TEXT);
            ck_assert(lw__utf8_valid(err.text, length));
            ck_assert(memcmp(err.text, text, length) == 0);
        }
}
END_TEST

START_TEST(a_long_prefix_is_cut_between_characters_too)
{
    char text[2 * LW_ERROR_TEXT] = "x";
    lw_error err;
    while (strlen(text) < LW_ERROR_TEXT)
        strcat(text, "\xE2\x84\xA6");
    lw_error_set(&err, LW_ERR_NAME, "tail");
    lw_error_prefix(&err, "%s", text);
    ck_assert(lw__utf8_valid(err.text, strlen(err.text)));
    ck_assert_uint_lt(strlen(err.text), LW_ERROR_TEXT);
}
END_TEST

START_TEST(what_is_no_utf8_becomes_question_marks)
{
    lw_error err;
    lw_error_set(&err, LW_ERR_NAME, "\"%.3s\" \xFFz", "ab\xC2\xB5"); // the precision cuts the sign
    ck_assert_str_eq(err.text, "\"ab?\" ?z");
}
END_TEST

// ---- nearest names

static const char *const names[] = {"resistance", "inductance", "latency", "law"};

START_TEST(a_slip_finds_the_name_that_was_meant)
{
    static const char *const slips[][2] = {{"resistence", "resistance"},  // another letter
                                           {"resistnce", "resistance"},   // one left out
                                           {"inducttance", "inductance"}, // one twice
                                           {"latnecy", "latency"},        // neighbours swapped
                                           {"lwa", "law"},
                                           {"law", "law"}};
    for (size_t i = 0; i < sizeof slips / sizeof slips[0]; i++) {
        const char *near = lw_nearest_name(slips[i][0], names, 4);
        ck_assert_ptr_nonnull(near);
        ck_assert_str_eq(near, slips[i][1]);
    }
}
END_TEST

START_TEST(what_is_far_from_every_name_finds_none)
{
    ck_assert_ptr_null(lw_nearest_name("friction", names, 4));
    ck_assert_ptr_null(lw_nearest_name("", names, 4));
    ck_assert_ptr_null(lw_nearest_name("x", names, 4));
    ck_assert_ptr_null(lw_nearest_name("law", names, 0));
}
END_TEST

START_TEST(a_swap_of_neighbours_counts_once)
{
    static const char *const two[] = {"abxx", "bacd"}; // two letters changed against one swap
    ck_assert_str_eq(lw_nearest_name("abcd", two, 2), "bacd");
}
END_TEST

// ---- text

// RFC 3629: what is well formed are the encodings of U+0080 to U+07FF (1920 of them), of U+0800 to
// U+FFFF without the 2048 surrogates (61440), of U+10000 to U+10FFFF (1048576), and no others.
START_TEST(well_formed_characters_are_those_of_rfc_3629)
{
    unsigned char s[4];
    long two = 0, three = 0, four = 0;
    for (unsigned k = 0; k < 0x1000000; k++) {
        s[0] = (unsigned char)(k >> 16);
        s[1] = (unsigned char)(k >> 8);
        s[2] = (unsigned char)k;
        three += lw__utf8_character((const char *)s, 3) == 3;
        two += s[2] == 0 && lw__utf8_character((const char *)s, 2) == 2;
    }
    for (unsigned k = 0; k < 0x1000000; k++) {
        s[0] = (unsigned char)(0xF0 | k >> 20);
        s[1] = (unsigned char)(k >> 12);
        s[2] = (unsigned char)(0x80 | (k >> 6 & 63));
        s[3] = (unsigned char)(0x80 | (k & 63));
        four += lw__utf8_character((const char *)s, 4) == 4;
    }
    ck_assert_int_eq(two, 1920);
    ck_assert_int_eq(three, 61440);
    ck_assert_int_eq(four, 1048576);
}
END_TEST

START_TEST(a_character_cut_short_is_not_well_formed)
{
    ck_assert(lw__utf8_valid("a\xC2\xB5z", 4) && lw__utf8_valid("", 0));
    ck_assert(!lw__utf8_valid("a\xC2", 2) && !lw__utf8_valid("\xE2\x84", 2));
    ck_assert(!lw__utf8_valid("\xB5", 1) && !lw__utf8_valid("\xF0\x9F\x94z", 4));
}
END_TEST

static lw_status name(const char *text, int dots, const char *part)
{
    lw_error err = {LW_OK, ""};
    lw_status status = lw__name_check("adc", text, dots, &err);
    if (part != NULL)
        ck_assert_msg(strstr(err.text, part) != NULL, "message: %s", err.text);
    return status;
}

START_TEST(names_are_1_to_200_bytes_of_utf8)
{
    char longest[202];
    memset(longest, 'n', sizeof longest);
    longest[200] = 0;
    ck_assert_int_eq(name("n", 0, NULL), LW_OK);
    ck_assert_int_eq(name("speed \xC2\xB5 wanted", 0, NULL), LW_OK);
    ck_assert_int_eq(name(longest, 0, NULL), LW_OK);
    longest[200] = 'n';
    longest[201] = 0;
    ck_assert_int_eq(name(longest, 0, "201 bytes; permitted 1 to 200"), LW_ERR_NAME);
    ck_assert_int_eq(name("", 0, "empty"), LW_ERR_NAME);
    ck_assert_int_eq(name(NULL, 0, "missing"), LW_ERR_NAME);
    ck_assert_int_eq(name("a\xFF", 0, "UTF-8"), LW_ERR_NAME);
}
END_TEST

START_TEST(names_hold_no_control_characters)
{
    ck_assert_int_eq(name("a\tb", 0, "control"), LW_ERR_NAME);
    ck_assert_int_eq(name("a\x7F", 0, "control"), LW_ERR_NAME);
    ck_assert_int_eq(name("a\xC2\x9B", 0, "control"), LW_ERR_NAME); // U+009B
    ck_assert_int_eq(name("a\xC2\xA0", 0, NULL), LW_OK);            // U+00A0, no control character
}
END_TEST

START_TEST(names_hold_a_dot_only_where_it_is_allowed)
{
    ck_assert_int_eq(name("axis.current", 0, "adc \"axis.current\""), LW_ERR_NAME);
    ck_assert_int_eq(name("axis.current", 1, NULL), LW_OK);
}
END_TEST

int main(void)
{
    Suite *suite = suite_create("status");
    TCase *codes_case = tcase_create("codes"), *messages = tcase_create("messages");
    TCase *nearest = tcase_create("nearest"), *text = tcase_create("text");
    tcase_add_test(codes_case, a_status_is_named_as_in_the_header_and_has_a_meaning);
    tcase_add_test(codes_case, failures_are_negative_and_only_a_stop_is_positive);
    tcase_add_test(codes_case, an_unknown_status_still_has_a_name);
    tcase_add_test(messages, a_message_is_kept_and_its_status_returned);
    tcase_add_test(messages, a_prefix_goes_before_the_message_and_leaves_the_status);
    tcase_add_test(messages, arguments_may_point_into_the_message);
    tcase_add_test(messages, a_long_message_is_cut_between_characters);
    tcase_add_test(messages, a_long_prefix_is_cut_between_characters_too);
    tcase_add_test(messages, what_is_no_utf8_becomes_question_marks);
    tcase_add_test(nearest, a_slip_finds_the_name_that_was_meant);
    tcase_add_test(nearest, what_is_far_from_every_name_finds_none);
    tcase_add_test(nearest, a_swap_of_neighbours_counts_once);
    tcase_add_test(text, well_formed_characters_are_those_of_rfc_3629);
    tcase_add_test(text, a_character_cut_short_is_not_well_formed);
    tcase_add_test(text, names_are_1_to_200_bytes_of_utf8);
    tcase_add_test(text, names_hold_no_control_characters);
    tcase_add_test(text, names_hold_a_dot_only_where_it_is_allowed);
    suite_add_tcase(suite, codes_case);
    suite_add_tcase(suite, messages);
    suite_add_tcase(suite, nearest);
    suite_add_tcase(suite, text);
    return run_suite(suite);
}
