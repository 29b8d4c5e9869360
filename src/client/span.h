/* The bytes of one member's value in a JSON object, so that it can be handed on as it came. */
#pragma once

#include <stddef.h>

/* text is a sound JSON object (a parser took it). Returns the value's first byte and fills
 * ret_length, or NULL when the object has no such member. key needs no escaping; a key written with
 * escapes is not found. */
const char *span_member(const char *text, size_t length, const char *key, size_t *ret_length);
