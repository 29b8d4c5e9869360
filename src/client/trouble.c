/* Words and exit code of a fault. */
#include "client/trouble.h"

#include <stdarg.h>
#include <stdio.h>

void trouble_fill(struct trouble *trouble, int code, const char *format, ...) {
    va_list args;

    va_start(args, format);
    vsnprintf(trouble->text, sizeof(trouble->text), format, args);
    va_end(args);
    trouble->code = code;
}
