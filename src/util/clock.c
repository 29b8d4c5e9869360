/* Boot time, real time and the id of the boot they belong to. */
#include "util/clock.h"

#include "util/cleanup.h"

#include <errno.h>
#include <fcntl.h>
#include <string.h>
#include <time.h>

static int64_t now_us(clockid_t id) {
    struct timespec ts = {0};

    clock_gettime(id, &ts); /* cannot fail for the two ids used here */
    return (int64_t)ts.tv_sec * 1000000 + ts.tv_nsec / 1000;
}

int64_t clock_boot_us(void) {
    return now_us(CLOCK_BOOTTIME);
}

int64_t clock_real_us(void) {
    return now_us(CLOCK_REALTIME);
}

int clock_boot_id(char ret[37]) {
    char id[36];
    scoped(close_p) int fd = open("/proc/sys/kernel/random/boot_id", O_RDONLY | O_CLOEXEC);

    if (fd < 0)
        return -errno;
    ssize_t n = read(fd, id, sizeof(id));
    if (n < 0)
        return -errno;
    if (n != (ssize_t)sizeof(id))
        return -EIO;
    memcpy(ret, id, sizeof(id));
    ret[36] = '\0';
    return 0;
}

/* By hand: strftime does not pad the year, and is the dearest line of a status object. */
static void put_digits(char *at, int n, int value) {
    for (; n > 0; n--, value /= 10)
        at[n - 1] = (char)('0' + value % 10);
}

void clock_rfc3339(int64_t t_real_us, char ret[21]) {
    static const int64_t year_0000_s = -62167219200, year_9999_end_s = 253402300799;
    int64_t s = t_real_us / 1000000 - (t_real_us % 1000000 < 0);
    struct tm tm = {0};

    s = s < year_0000_s ? year_0000_s : s > year_9999_end_s ? year_9999_end_s : s;
    gmtime_r(&(time_t){(time_t)s}, &tm);
    memcpy(ret, "0000-00-00T00:00:00Z", 21);
    put_digits(ret, 4, tm.tm_year + 1900);
    put_digits(ret + 5, 2, tm.tm_mon + 1);
    put_digits(ret + 8, 2, tm.tm_mday);
    put_digits(ret + 11, 2, tm.tm_hour);
    put_digits(ret + 14, 2, tm.tm_min);
    put_digits(ret + 17, 2, tm.tm_sec);
}
