/* Whole files: bounds on reading, and replacing that leaves either the old or the new file. */
#include "util/files.h"

#include "util/cleanup.h"

#include <dirent.h>
#include <errno.h>
#include <fcntl.h>
#include <limits.h>
#include <setjmp.h>
#include <signal.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdio.h>
#include <string.h>
#include <sys/resource.h>
#include <sys/stat.h>

#include <cmocka.h>

struct place {
    char root[32], path[64], beside[64];
};

static int make_place(void **state) {
    static struct place p;

    snprintf(p.root, sizeof(p.root), "/tmp/brink-files-XXXXXX");
    assert_non_null(mkdtemp(p.root));
    snprintf(p.path, sizeof(p.path), "%s/status.json", p.root);
    snprintf(p.beside, sizeof(p.beside), "%s/status.json.new", p.root);
    *state = &p;
    return 0;
}

static int remove_place(void **state) {
    const struct place *p = *state;

    remove(p->path);
    remove(p->beside);
    return rmdir(p->root);
}

static void assert_holds(const char *path, const char *expected) {
    scoped(free_p) char *text = NULL;
    size_t length;

    assert_int_equal(files_read(path, 1 << 20, &text, &length), 0);
    assert_int_equal(length, strlen(expected));
    assert_string_equal(text, expected);
}

static int entries(const char *folder) {
    DIR *dir = opendir(folder);
    int n = 0;

    assert_non_null(dir);
    while (readdir(dir))
        n++;
    closedir(dir);
    return n - 2; /* . and .. */
}

static void test_replace_and_read(void **state) {
    const struct place *p = *state;
    struct stat st;
    mode_t mask = umask(0077);

    assert_int_equal(files_replace(p->path, "one", 3, 0644, false), 0);
    umask(mask);
    assert_holds(p->path, "one");
    assert_int_equal(stat(p->path, &st), 0);
    assert_int_equal(st.st_mode & 07777, 0644); /* whatever the umask */
    assert_int_equal(files_replace(p->path, "", 0, 0600, true), 0);
    assert_holds(p->path, "");
    assert_int_equal(stat(p->path, &st), 0);
    assert_int_equal(st.st_mode & 07777, 0600);
    assert_int_equal(entries(p->root), 1);
}

/* Who opened the old file goes on reading the old file: it is replaced, not written over. */
static void test_reader_of_the_old_file_is_left_alone(void **state) {
    const struct place *p = *state;
    char text[8] = "";

    assert_int_equal(files_replace(p->path, "old", 3, 0644, false), 0);
    scoped(close_p) int fd = open(p->path, O_RDONLY | O_CLOEXEC);
    assert_true(fd >= 0);
    assert_int_equal(files_replace(p->path, "newer", 5, 0644, false), 0);
    assert_int_equal(read(fd, text, sizeof(text)), 3);
    assert_memory_equal(text, "old", 3);
    assert_holds(p->path, "newer");
}

/* A writer that was killed leaves its half file; a link laid there must not be followed. */
static void test_leftovers(void **state) {
    const struct place *p = *state;
    FILE *half = fopen(p->beside, "we");

    assert_non_null(half);
    fputs("half", half);
    fclose(half);
    assert_int_equal(files_replace(p->path, "whole", 5, 0644, false), 0);
    assert_holds(p->path, "whole");
    assert_int_equal(entries(p->root), 1);
    assert_int_equal(symlink(p->path, p->beside), 0);
    assert_int_equal(files_replace(p->path, "again", 5, 0644, false), 0);
    assert_holds(p->path, "again");
    assert_int_equal(entries(p->root), 1);
}

/* The target is a folder, so the rename fails after the writing: nothing may stay behind. */
static void test_failed_replace_leaves_nothing(void **state) {
    const struct place *p = *state;
    char longer[PATH_MAX + 1];

    assert_int_equal(mkdir(p->path, 0700), 0);
    assert_int_equal(files_replace(p->path, "x", 1, 0644, false), -EISDIR);
    assert_int_equal(entries(p->root), 1);
    assert_int_equal(rmdir(p->path), 0);
    assert_int_equal(files_replace("/nonexistent/x", "x", 1, 0644, true), -ENOENT);
    memset(longer, 'a', PATH_MAX);
    longer[PATH_MAX] = '\0';
    assert_int_equal(files_replace(longer, "x", 1, 0644, false), -ENAMETOOLONG);
    longer[PATH_MAX - 4] = '\0'; /* fits, but not with .new and the NUL */
    assert_int_equal(files_replace(longer, "x", 1, 0644, false), -ENAMETOOLONG);
}

/* A limit on the size of files stands for a full disk: the first write is short, the next fails. */
static void test_full_disk_leaves_the_old_file(void **state) {
    const struct place *p = *state;
    struct rlimit old, tight;

    assert_int_equal(files_replace(p->path, "old", 3, 0644, false), 0);
    assert_int_equal(getrlimit(RLIMIT_FSIZE, &old), 0);
    tight = old;
    tight.rlim_cur = 4;
    sighandler_t handler = signal(SIGXFSZ, SIG_IGN);
    assert_int_equal(setrlimit(RLIMIT_FSIZE, &tight), 0);
    int r = files_replace(p->path, "longer", 6, 0644, false);
    assert_int_equal(setrlimit(RLIMIT_FSIZE, &old), 0);
    signal(SIGXFSZ, handler);
    assert_int_equal(r, -EFBIG);
    assert_holds(p->path, "old");
    assert_int_equal(entries(p->root), 1);
}

static void test_relative_path_is_synced_in_its_folder(void **state) {
    const struct place *p = *state;
    char here[PATH_MAX];

    assert_non_null(getcwd(here, sizeof(here)));
    assert_int_equal(chdir(p->root), 0);
    assert_int_equal(files_replace("status.json", "x", 1, 0644, true), 0);
    assert_int_equal(chdir(here), 0);
    assert_holds(p->path, "x");
}

static void test_read_bound(void **state) {
    const struct place *p = *state;
    char *text = (char *)"untouched";
    size_t length = 77;

    assert_int_equal(files_replace(p->path, "12345", 5, 0600, false), 0);
    assert_int_equal(files_read(p->path, 4, &text, &length), -EFBIG);
    assert_int_equal(files_read(p->root, 4, &text, &length), -EISDIR);
    assert_int_equal(files_read(p->beside, 4, &text, &length), -ENOENT);
    assert_string_equal(text, "untouched");
    assert_int_equal(length, 77);
    assert_int_equal(files_read(p->path, 5, &text, &length), 0);
    assert_int_equal(length, 5);
    assert_string_equal(text, "12345");
    free(text);
}

/* Sizes about the first block and its doublings; NULs are kept and one more is behind the end. */
static void test_read_sizes(void **state) {
    static const size_t sizes[] = {0, 1, 4095, 4096, 4097, 8191, 8192, 8193, 70000};
    const struct place *p = *state;

    for (size_t i = 0; i < sizeof(sizes) / sizeof(sizes[0]); i++) {
        scoped(free_p) char *data = calloc(1, sizes[i] + 1), *text = NULL;
        size_t length = 1;
        assert_non_null(data);
        for (size_t k = 0; k < sizes[i]; k++)
            data[k] = (char)(k * 31);
        assert_int_equal(files_replace(p->path, data, sizes[i], 0600, false), 0);
        assert_int_equal(files_read(p->path, 70000, &text, &length), 0);
        assert_int_equal(length, sizes[i]);
        assert_memory_equal(text, data, sizes[i] + 1);
    }
}

/* Files that do not tell their size: /proc, a pipe, a FIFO. */
static void test_read_without_a_size(void **state) {
    const struct place *p = *state;
    scoped(free_p) char *text = NULL, *piped = NULL, *none = NULL;
    char path[32];
    size_t length;
    int ends[2];

    assert_int_equal(files_read("/proc/self/smaps", 1 << 20, &text, &length), 0);
    assert_true(length > 4096 && strlen(text) == length);
    assert_int_equal(files_read("/dev/zero", 10000, &none, &length), -EFBIG);

    assert_int_equal(pipe2(ends, O_CLOEXEC), 0);
    assert_int_equal(write(ends[1], "piped", 5), 5);
    snprintf(path, sizeof(path), "/proc/self/fd/%d", ends[0]);
    close(ends[1]);
    assert_int_equal(files_read(path, 100, &piped, &length), 0);
    close(ends[0]);
    assert_string_equal(piped, "piped");

    assert_int_equal(mkfifo(p->path, 0600), 0);
    assert_int_equal(files_read(p->path, 100, &none, &length), 0); /* does not wait for a writer */
    assert_int_equal(length, 0);
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test_setup_teardown(test_replace_and_read, make_place, remove_place),
        cmocka_unit_test_setup_teardown(test_reader_of_the_old_file_is_left_alone, make_place,
                                        remove_place),
        cmocka_unit_test_setup_teardown(test_leftovers, make_place, remove_place),
        cmocka_unit_test_setup_teardown(test_failed_replace_leaves_nothing, make_place,
                                        remove_place),
        cmocka_unit_test_setup_teardown(test_full_disk_leaves_the_old_file, make_place,
                                        remove_place),
        cmocka_unit_test_setup_teardown(test_relative_path_is_synced_in_its_folder, make_place,
                                        remove_place),
        cmocka_unit_test_setup_teardown(test_read_bound, make_place, remove_place),
        cmocka_unit_test_setup_teardown(test_read_sizes, make_place, remove_place),
        cmocka_unit_test_setup_teardown(test_read_without_a_size, make_place, remove_place),
    };

    return cmocka_run_group_tests(tests, NULL, NULL);
}
