/* brink.conf from anywhere: never a crash, and whatever is accepted prints as a config that is
 * accepted again. */
#include "daemon/config.h"
#include "util/text.h"

#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size);

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size) {
    static struct config config;
    static struct config_problems problems;
    char *printed = NULL;
    size_t length = 0;

    if (size > 16384 || memmem(data, size, "/dev/", 5) || memmem(data, size, "/proc/", 6))
        return 0; /* paths that the cell tables must not be looked for at */
    if (config_parse((const char *)data, size, "brink.conf", &config, &problems) != 0) {
        if (problems.n == 0 || problems.length == 0)
            abort();
        return 0;
    }
    FILE *out = open_memstream(&printed, &length);
    if (!out)
        return 0;
    config_print(&config, out);
    fclose(out);
    if (config_parse(printed, length, "printed", &config, &problems) != 0) {
        fputs(problems.text, stderr);
        abort();
    }
    free(printed);
    return 0;
}
