/* CRC-8 with polynomial 0x07 against published values. */
#include "util/crc8.h"

#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <string.h>

#include <cmocka.h>

/* G. Cook, Catalogue of parametrised CRC algorithms, CRC-8/SMBUS: check 0xf4, residue 0x00. */
static void test_check_value(void **state) {
    (void)state;
    assert_int_equal(crc8("123456789", 9), 0xf4);
    assert_int_equal(crc8("123456789\xf4", 10), 0x00);
}

/* The code of a single byte is that byte's remainder: the first entries of the usual table. */
static void test_single_bytes(void **state) {
    static const uint8_t table[] = {0x00, 0x07, 0x0e, 0x09, 0x1c, 0x1b, 0x12, 0x15};

    (void)state;
    assert_int_equal(crc8("", 0), 0x00);
    for (uint8_t i = 0; i < sizeof(table); i++)
        assert_int_equal(crc8(&i, 1), table[i]);
    assert_int_equal(crc8("\xff", 1), 0xf3);
    assert_int_equal(crc8("\x80", 1), 0x89);
}

/* An 8-bit CRC finds every burst of up to 8 bits, so every changed byte. */
static void test_finds_each_changed_byte(void **state) {
    char line[] = "v=3.712 i=0.84 c=11.0";
    const uint8_t good = crc8(line, strlen(line));

    (void)state;
    for (size_t i = 0; line[i]; i++)
        for (unsigned change = 1; change < 256; change++) {
            line[i] = (char)((unsigned char)line[i] ^ change);
            assert_int_not_equal(crc8(line, sizeof(line) - 1), good);
            line[i] = (char)((unsigned char)line[i] ^ change);
        }
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_check_value),
        cmocka_unit_test(test_single_bytes),
        cmocka_unit_test(test_finds_each_changed_byte),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
