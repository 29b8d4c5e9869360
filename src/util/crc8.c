/* The packet-error code of SMBus, bit by bit: lines are short, a table would cost more than it
 * saves. */
#include "util/crc8.h"

uint8_t crc8(const void *data, size_t length) {
    const uint8_t *p = data;
    unsigned crc = 0;

    for (size_t i = 0; i < length; i++) {
        crc ^= p[i];
        for (int bit = 0; bit < 8; bit++)
            crc = crc & 0x80U ? (crc << 1 ^ 0x07U) & 0xffU : crc << 1;
    }
    return (uint8_t)crc;
}
