/* The status file: whole, readable for everyone, and back again after every kind of trouble. */
#include "publish/statusfile.h"

#include "util/files.h"

#include <dirent.h>
#include <errno.h>
#include <fcntl.h>
#include <limits.h>
#include <setjmp.h>
#include <signal.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/resource.h>
#include <sys/stat.h>
#include <sys/wait.h>
#include <unistd.h>

#include <cmocka.h>

struct place {
    char dir[64], path[128], temp[128];
    struct statusfile *file;
};

static void place_open(struct place *place) {
    strcpy(place->dir, "/tmp/brink-statusfile-XXXXXX");
    assert_non_null(mkdtemp(place->dir));
    snprintf(place->path, sizeof(place->path), "%s/status.json", place->dir);
    snprintf(place->temp, sizeof(place->temp), "%s/.status.json.new", place->dir);
    assert_int_equal(statusfile_new(&place->file, place->path), 0);
}

static void place_close(struct place *place) {
    statusfile_free(place->file);
    unlink(place->path);
    unlink(place->temp);
    rmdir(place->dir);
}

static int put(struct place *place, const char *text) {
    return statusfile_write(place->file, text, strlen(text));
}

static void assert_holds(const struct place *place, const char *want) {
    char *text = NULL;
    size_t length = 0;

    assert_int_equal(files_read(place->path, 65536, &text, &length), 0);
    assert_string_equal(text, want);
    free(text);
}

static int count_entries(const char *dir) {
    DIR *entries = opendir(dir);
    int n = 0;

    assert_non_null(entries);
    for (const struct dirent *entry; (entry = readdir(entries));)
        n += entry->d_name[0] != '.' || entry->d_name[1] == 's';
    closedir(entries);
    return n;
}

static void test_written_whole_and_readable(void **state) {
    struct place place;
    struct stat st;
    mode_t old = umask(0077);

    (void)state;
    place_open(&place);
    assert_int_equal(put(&place, "{\"brink\":1,\"long\":true}"), 0);
    assert_int_equal(put(&place, "{\"brink\":1}"), 0);
    umask(old);
    assert_holds(&place, "{\"brink\":1}\n");
    assert_int_equal(stat(place.path, &st), 0);
    assert_int_equal(st.st_mode & 07777, 0644);
    assert_int_equal(count_entries(place.dir), 1);
    place_close(&place);
}

/* A reader that has the file open keeps the whole of what it opened. */
static void test_an_open_reader_keeps_its_object(void **state) {
    struct place place;
    char buf[64] = "";

    (void)state;
    place_open(&place);
    assert_int_equal(put(&place, "first"), 0);
    int fd = open(place.path, O_RDONLY | O_CLOEXEC);
    assert_int_equal(put(&place, "second"), 0);
    assert_int_equal(put(&place, "third"), 0);
    assert_int_equal(read(fd, buf, sizeof(buf) - 1), 6);
    assert_string_equal(buf, "first\n");
    close(fd);
    place_close(&place);
}

static void test_directory_comes_and_goes(void **state) {
    struct place place;

    (void)state;
    place_open(&place);
    rmdir(place.dir);
    assert_int_equal(put(&place, "a"), -ENOENT);
    assert_int_equal(mkdir(place.dir, 0755), 0);
    assert_int_equal(put(&place, "b"), 0);
    unlink(place.path);
    assert_int_equal(rmdir(place.dir), 0);
    assert_int_equal(put(&place, "c"), -ENOENT);
    assert_int_equal(mkdir(place.dir, 0755), 0);
    assert_int_equal(put(&place, "d"), 0);
    /* Removed and made again between two writes: nobody notices. */
    unlink(place.path);
    assert_int_equal(rmdir(place.dir), 0);
    assert_int_equal(mkdir(place.dir, 0755), 0);
    assert_int_equal(put(&place, "e"), 0);
    assert_holds(&place, "e\n");
    place_close(&place);
}

static void test_left_over_temporary_file(void **state) {
    struct place place;

    (void)state;
    place_open(&place);
    int fd = open(place.temp, O_WRONLY | O_CREAT | O_CLOEXEC, 0400);
    assert_true(fd >= 0);
    close(fd);
    assert_int_equal(put(&place, "a"), 0);
    assert_holds(&place, "a\n");
    assert_int_equal(count_entries(place.dir), 1);
    place_close(&place);
}

/* A link laid in the temporary file's place is replaced, not followed. */
static void test_link_is_not_followed(void **state) {
    struct place place;
    char victim[160];
    struct stat st;

    (void)state;
    place_open(&place);
    snprintf(victim, sizeof(victim), "%s/victim", place.dir);
    assert_int_equal(symlink(victim, place.temp), 0);
    assert_int_equal(put(&place, "a"), 0);
    assert_int_equal(lstat(victim, &st), -1);
    assert_holds(&place, "a\n");
    place_close(&place);
}

/* No room: a file size limit cuts the write short as a full disk does. In a process of its own. */
static int write_under_limits(void) {
    struct place place;
    struct rlimit limit;
    char text[512], *kept = NULL;
    size_t length = 0;

    memset(text, 'x', sizeof(text) - 1);
    text[sizeof(text) - 1] = '\0';
    place_open(&place);
    signal(SIGXFSZ, SIG_IGN);
    getrlimit(RLIMIT_FSIZE, &limit);
    if (put(&place, "before") != 0)
        return 1;
    setrlimit(RLIMIT_FSIZE, &(struct rlimit){100, limit.rlim_max});
    if (put(&place, text) != -ENOSPC)
        return 2;
    setrlimit(RLIMIT_FSIZE, &(struct rlimit){0, limit.rlim_max});
    if (put(&place, text) != -EFBIG)
        return 3;
    setrlimit(RLIMIT_FSIZE, &limit);
    if (count_entries(place.dir) != 1)
        return 4; /* the half file is gone */
    if (files_read(place.path, 4096, &kept, &length) != 0 || strcmp(kept, "before\n") != 0)
        return 5;
    free(kept);
    if (put(&place, text) != 0)
        return 6;
    place_close(&place);
    return 0;
}

static void test_no_room_then_room_again(void **state) {
    int status;
    pid_t child = fork();

    (void)state;
    if (child == 0)
        _exit(write_under_limits());
    assert_int_equal(waitpid(child, &status, 0), child);
    assert_true(WIFEXITED(status));
    assert_int_equal(WEXITSTATUS(status), 0);
}

static void test_target_is_a_directory(void **state) {
    struct place place;

    (void)state;
    place_open(&place);
    assert_int_equal(mkdir(place.path, 0755), 0);
    assert_int_equal(put(&place, "a"), -EISDIR);
    assert_int_equal(count_entries(place.dir), 1);
    assert_int_equal(rmdir(place.path), 0);
    assert_int_equal(put(&place, "b"), 0);
    place_close(&place);
}

static void test_no_descriptor_is_kept_or_lost(void **state) {
    struct place place;

    (void)state;
    place_open(&place);
    assert_int_equal(put(&place, "a"), 0);
    int before = dup(0);
    close(before);
    for (int i = 0; i < 100; i++)
        assert_int_equal(put(&place, "a"), 0);
    int after = dup(0);
    close(after);
    assert_int_equal(before, after);
    place_close(&place);
}

static void test_bad_paths(void **state) {
    struct statusfile *file = NULL;
    char name[NAME_MAX + 2];

    (void)state;
    memset(name, 'n', sizeof(name) - 1);
    name[sizeof(name) - 1] = '\0';
    assert_int_equal(statusfile_new(&file, name), -ENAMETOOLONG);
    assert_int_equal(statusfile_new(&file, name + 2),
                     -ENAMETOOLONG); /* the temporary's is longer */
    assert_int_equal(statusfile_new(&file, ""), -EINVAL);
    assert_int_equal(statusfile_new(&file, "/run/brink/"), -EINVAL);
    assert_int_equal(statusfile_new(&file, "/run/.."), -EINVAL);
    assert_null(file);
    assert_null(statusfile_free(NULL));
    assert_int_equal(statusfile_new(&file, "/nowhere-at-all/status.json"), 0);
    assert_int_equal(statusfile_write(file, "x", 1), -ENOENT);
    statusfile_free(file);
}

int main(void) {
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(test_written_whole_and_readable),
        cmocka_unit_test(test_an_open_reader_keeps_its_object),
        cmocka_unit_test(test_directory_comes_and_goes),
        cmocka_unit_test(test_left_over_temporary_file),
        cmocka_unit_test(test_link_is_not_followed),
        cmocka_unit_test(test_no_room_then_room_again),
        cmocka_unit_test(test_target_is_a_directory),
        cmocka_unit_test(test_no_descriptor_is_kept_or_lost),
        cmocka_unit_test(test_bad_paths),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
