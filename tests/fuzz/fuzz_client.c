/* Any bytes as a status: refused with words, or shown within 20 lines and clean. */
#include "client/check.h"
#include "client/page.h"
#include "client/template.h"
#include "client/words.h"

#include <stdint.h>
#include <stdlib.h>
#include <string.h>

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size);

static void must(bool fine) {
    if (!fine)
        abort();
}

static void assert_clean(const char *text) {
    for (; *text; text++)
        must((unsigned char)*text >= 0x20 || *text == '\n');
}

static void show(const struct view *view) {
    static char page[PAGE_SIZE], check[CHECK_SIZE], line[TEMPLATE_SIZE];
    struct page_style style = {.bar = true};
    struct trouble trouble = {0};
    int lines = 0;

    size_t n = page_write(view, &style, page);
    must(n == strlen(page) && n > 0 && page[n - 1] == '\n');
    assert_clean(page);
    for (const char *at = page; *at; at = strchr(at, '\n') + 1, lines++)
        must(words_fit(at, PAGE_COLUMNS + 1) >= strcspn(at, "\n"));
    must(lines <= PAGE_LINES);
    check_write(view, NULL, check);
    assert_clean(check);
    must(strchr(check, '\n') == check + strlen(check) - 1);
    must(template_write(template_default, view, line, &trouble) == 0);
    assert_clean(line);
}

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t size) {
    struct trouble trouble = {0};
    struct view view;
    json_t *json = NULL;

    if (view_parse((const char *)data, size, "here", &json, &trouble) == 0 &&
        view_read(json, "here", false, &view, &trouble) == 0)
        show(&view);
    else
        must(trouble.code != 0 && *trouble.text);
    json_decref(json);
    return 0;
}
