/* The page for people: at most PAGE_LINES lines of PAGE_COLUMNS columns, whatever the status says.
 */
#pragma once

#include "client/view.h"

enum { PAGE_LINES = 20, PAGE_COLUMNS = 80, PAGE_SIZE = 16384 };

struct page_style {
    bool bar;        /* draw the bar of the charge */
    bool colour;     /* mark stage and alerts with escape sequences (ECMA-48 SGR) */
    bool unicode;    /* for bar and gaps */
    const char *old; /* why the status is out of date, NULL = it is not */
};

/* Writes the page, each line with its newline. Returns its length. */
size_t page_write(const struct view *view, const struct page_style *style, char ret[PAGE_SIZE]);
