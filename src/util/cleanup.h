/* Scope-bound cleanup: `scoped(free_p) char *text = ...;` */
#pragma once

#include <stdio.h>
#include <stdlib.h>
#include <unistd.h>

#define scoped(function) __attribute__((cleanup(function)))

static inline void free_p(void *p) {
    free(*(void **)p);
}

static inline void close_p(const int *fd) {
    if (*fd >= 0)
        close(*fd);
}

static inline void fclose_p(FILE **file) {
    if (*file)
        fclose(*file);
}
