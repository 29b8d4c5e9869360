/* CRC-8, polynomial x^8 + x^2 + x + 1 (0x07), start 0, no reflection: the packet-error code of
 * SMBus 1.1 and later. Check value of "123456789" is 0xF4. */
#pragma once

#include <stddef.h>
#include <stdint.h>

uint8_t crc8(const void *data, size_t length);
