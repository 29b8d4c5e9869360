/* Any bytes as a log CSV: read to the end, every row must keep what logcsv.h promises. */
#include "decode/logcsv.h"

#include <math.h>
#include <stdint.h>
#include <stdlib.h>
#include <sys/mman.h>
#include <unistd.h>

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size);

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size) {
    int fd = memfd_create("log", MFD_CLOEXEC), r;
    struct logcsv *log = NULL;
    struct logcsv_row row;
    char message[256];
    double before_s = -HUGE_VAL;

    if (fd < 0 || write(fd, data, size) != (ssize_t)size || lseek(fd, 0, SEEK_SET) != 0)
        abort();
    if (logcsv_new(&log, fd, "fuzz", message, sizeof message))
        return 0;
    while ((r = logcsv_next(log, &row)) == 0) {
        if (!(row.value[LOGCSV_TIME] > before_s) || !isfinite(row.value[LOGCSV_VOLTAGE]))
            abort();
        for (int i = 0; i < LOGCSV_COLUMNS; i++)
            if (isinf(row.value[i]))
                abort();
        before_s = row.value[LOGCSV_TIME];
    }
    if ((r == LOGCSV_E_FORMAT) != (logcsv_message(log)[0] != '\0'))
        abort();
    logcsv_free(log);
    return 0;
}
