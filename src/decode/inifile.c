/* INI files by inih. inih splits lines into section, key and value; the reader that feeds it counts
 * the lines (this build of inih hands the handler none) and refuses what inih would swallow. */
#include "decode/inifile.h"

#include "util/cleanup.h"
#include "util/files.h"
#include "util/text.h"

#include <errno.h>
#include <ini.h>
#include <stdarg.h>
#include <stdbool.h>
#include <stdio.h>
#include <string.h>

enum { QUOTE_MAX = 40 };

struct inifile {
    size_t pool_used, pool_size;
    size_t n_sections, n_entries;
    struct inifile_section section[INIFILE_SECTIONS_MAX];
    struct inifile_entry entry[INIFILE_ENTRIES_MAX];
    char pool[]; /* the file's name, then every string of it */
};

struct parse {
    struct inifile *ini;
    const char *at, *end;
    int line;
    bool indented;  /* the line goes on with a value */
    bool has_entry; /* this section has a key already */
    char *message;
    size_t size;
    int r;
};

/* One line without its end and its comment. */
struct content {
    const char *text;
    size_t length;
};

static bool blank(char c) {
    return c == ' ' || c == '\t';
}

static int say(const char *name, int line, char *message, size_t size, const char *format,
               va_list args) __attribute__((format(printf, 5, 0)));

static int say(const char *name, int line, char *message, size_t size, const char *format,
               va_list args) {
    char text[512];

    vsnprintf(text, sizeof(text), format, args);
    if (line > 0)
        snprintf(message, size, "%s:%d: %s", name, line, text);
    else
        snprintf(message, size, "%s: %s", name, text);
    return INIFILE_E_SYNTAX;
}

static int refuse(struct parse *p, const char *format, ...) __attribute__((format(printf, 2, 3)));

static int refuse(struct parse *p, const char *format, ...) {
    va_list args;

    va_start(args, format);
    p->r = say(p->ini->pool, p->line, p->message, p->size, format, args);
    va_end(args);
    return p->r;
}

int inifile_refuse(const struct inifile *ini, int line, char *message, size_t size,
                   const char *format, ...) {
    va_list args;

    va_start(args, format);
    int r = say(ini->pool, line, message, size, format, args);
    va_end(args);
    return r;
}

/* Length that a message may quote of text. */
static int quote(const char *text, size_t length) {
    return length <= QUOTE_MAX ? (int)length : text_cut(text, QUOTE_MAX);
}

/* A NUL-ended copy in the pool. What is kept of a line, with its NUL, is never longer than the line
 * with its newline, so there is always room; if that were wrong, the file would be refused. */
static char *keep(struct parse *p, const char *text, size_t length) {
    struct inifile *ini = p->ini;

    if (ini->pool_size - ini->pool_used <= length) {
        refuse(p, "the pool for the file's text is too small");
        return NULL;
    }
    char *kept = ini->pool + ini->pool_used;
    memcpy(kept, text, length);
    kept[length] = '\0';
    ini->pool_used += length + 1;
    return kept;
}

/* ---- the reader: one line at a time ------------------------------------------------------- */

static int check_bytes(struct parse *p, const char *line, size_t length, size_t most) {
    if (length > most)
        return refuse(p,
                      "the line has %zu bytes; at most %zu are accepted, go on with the value "
                      "on an indented line",
                      length, most);
    for (size_t i = 0; i < length; i++) {
        unsigned char c = (unsigned char)line[i];
        if (c == '\0')
            return refuse(p, "byte %zu is NUL; only text is accepted", i + 1);
        if ((c < 0x20 && c != '\t') || c == 0x7f)
            return refuse(p, "byte %zu is the control character 0x%02x; only text is accepted",
                          i + 1, (unsigned)c);
    }
    if (!text_is_utf8(line, length))
        return refuse(p, "the line is not UTF-8; save the file as UTF-8");
    return 0;
}

static struct content without_comment(const char *line, size_t length) {
    size_t n = length, first = 0;

    while (first < length && blank(line[first]))
        first++;
    if (first < length && (line[first] == '#' || line[first] == ';'))
        return (struct content){line, 0};
    for (size_t i = 1; i < n; i++)
        if (line[i] == ';' && blank(line[i - 1]))
            n = i;
    while (n > 0 && blank(line[n - 1]))
        n--;
    return (struct content){line, n};
}

static int begin_section(struct parse *p, struct content c) {
    struct inifile *ini = p->ini;
    const char *close = memchr(c.text, ']', c.length), *from = c.text + 1;

    if (!close || close + 1 != c.text + c.length)
        return refuse(p, "'%.*s' is no section; [NAME] alone on its line is accepted",
                      quote(c.text, c.length), c.text);
    size_t n = (size_t)(close - from);
    while (n > 0 && blank(*from))
        from++, n--;
    while (n > 0 && blank(from[n - 1]))
        n--;
    if (n == 0)
        return refuse(p, "the section has no name; [NAME] is accepted");
    if (ini->n_sections == INIFILE_SECTIONS_MAX)
        return refuse(p, "more than %d sections", INIFILE_SECTIONS_MAX);
    const char *name = keep(p, from, n);
    if (!name)
        return p->r;
    for (size_t i = 0; i < ini->n_sections; i++)
        if (strcmp(ini->section[i].name, name) == 0)
            return refuse(p,
                          "section [%.*s] stands here a second time, first in line %d; once is "
                          "accepted",
                          quote(name, n), name, ini->section[i].line);
    ini->section[ini->n_sections++] = (struct inifile_section){.name = name, .line = p->line};
    p->has_entry = false;
    return 0;
}

/* A line with a value going on: what looks like a section or key of its own is refused. */
static int check_indented(struct parse *p, struct content c) {
    const char *text = c.text;
    size_t n = c.length;

    while (n > 0 && blank(*text))
        text++, n--;
    if (n == 0)
        return 0;
    p->indented = true;
    if (*text == '[' || memchr(text, '=', n))
        return refuse(p,
                      "'%.*s' is indented, so it would go on with the value above; begin "
                      "sections and keys at the start of the line",
                      quote(text, n), text);
    if (!p->has_entry)
        return refuse(p,
                      "'%.*s' is indented, so it would go on with a value, but none stands "
                      "above it in this section",
                      quote(text, n), text);
    return 0;
}

static int check_content(struct parse *p, struct content c) {
    p->indented = false;
    if (c.length == 0)
        return 0;
    if (blank(c.text[0]))
        return check_indented(p, c);
    if (c.text[0] == '[')
        return begin_section(p, c);
    size_t i = 0;
    while (i < c.length && c.text[i] != '=' && c.text[i] != ':')
        i++;
    if (i == c.length || c.text[i] != '=')
        return refuse(p,
                      "'%.*s' is neither a section nor a key; [NAME], KEY = VALUE and comments "
                      "beginning with # are accepted",
                      quote(c.text, c.length), c.text);
    if (p->ini->n_sections == 0)
        return refuse(p, "'%.*s' stands before the first section; begin with a line [NAME]",
                      quote(c.text, c.length), c.text);
    return 0;
}

/* fgets for inih: the next line, or NULL at the end and after the first fault. */
static char *read_line(char *buf, int size, void *stream) {
    struct parse *p = stream;

    if (p->r != 0 || p->at == p->end)
        return NULL;
    size_t left = (size_t)(p->end - p->at);
    const char *line = p->at, *newline = memchr(line, '\n', left);
    size_t n = newline ? (size_t)(newline - line) : left;
    p->at += newline ? n + 1 : n;
    p->line++;
    if (n > 0 && line[n - 1] == '\r')
        n--;
    if (check_bytes(p, line, n, (size_t)size - 1) != 0)
        return NULL;
    struct content c = without_comment(line, n);
    if (check_content(p, c) != 0)
        return NULL;
    memcpy(buf, c.text, c.length);
    buf[c.length] = '\0';
    return buf;
}

/* ---- the handler: one key and value, or a piece of a value -------------------------------- */

static int go_on(struct parse *p, const char *value) {
    struct inifile *ini = p->ini;
    const char *so_far = ini->entry[ini->n_entries - 1].value; /* stands last in the pool */

    if (*so_far)
        ini->pool[ini->pool_used - 1] = ' ';
    else
        ini->pool_used--;
    return keep(p, value, strlen(value)) != NULL;
}

static int check_key(struct parse *p, const char *key) {
    static const char letters[] =
        "abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ0123456789_-";
    const struct inifile *ini = p->ini;
    const char *section = ini->section[ini->n_sections - 1].name;

    if (!*key)
        return refuse(p, "the key before '=' is missing; KEY = VALUE is accepted");
    if (key[strspn(key, letters)])
        return refuse(p, "'%.*s' is no key; letters, digits, _ and - are accepted",
                      text_cut(key, QUOTE_MAX), key);
    for (size_t i = 0; i < ini->n_entries; i++)
        if (ini->entry[i].section == section && strcmp(ini->entry[i].key, key) == 0)
            return refuse(p,
                          "'%.*s' stands a second time in [%.*s], first in line %d; once is "
                          "accepted",
                          text_cut(key, QUOTE_MAX), key, text_cut(section, QUOTE_MAX), section,
                          ini->entry[i].line);
    if (ini->n_entries == INIFILE_ENTRIES_MAX)
        return refuse(p, "more than %d keys", INIFILE_ENTRIES_MAX);
    return 0;
}

static int take(void *user, const char *section, const char *key, const char *value) {
    struct parse *p = user;
    struct inifile *ini = p->ini;

    (void)section; /* inih cuts it to 49 bytes; the reader keeps it whole */
    if (p->indented)
        return go_on(p, value);
    if (check_key(p, key) != 0)
        return 0;
    const char *kept_key = keep(p, key, strlen(key));
    const char *kept_value = keep(p, value, strlen(value));
    if (!kept_key || !kept_value)
        return 0;
    ini->entry[ini->n_entries++] =
        (struct inifile_entry){.section = ini->section[ini->n_sections - 1].name,
                               .key = kept_key,
                               .value = kept_value,
                               .line = p->line};
    p->has_entry = true;
    return 1;
}

/* ---- the file ------------------------------------------------------------------------------ */

static struct inifile *new_inifile(const char *name, size_t length) {
    size_t name_size = strlen(name) + 1, pool_size = name_size + length + 1;
    struct inifile *ini = calloc(1, sizeof(*ini) + pool_size);

    if (!ini)
        return NULL;
    memcpy(ini->pool, name, name_size);
    ini->pool_used = name_size;
    ini->pool_size = pool_size; /* one more than the text: the last line may lack its newline */
    return ini;
}

int inifile_parse(struct inifile **ret, const char *text, size_t length, const char *name,
                  char *message, size_t size) {
    static const char bom[] = "\xef\xbb\xbf";

    if (length > INIFILE_BYTES_MAX) {
        snprintf(message, size, "%s: longer than %d KiB; this is no file for here", name,
                 INIFILE_BYTES_MAX / 1024);
        return INIFILE_E_SYNTAX;
    }
    scoped(inifile_free_p) struct inifile *ini = new_inifile(name, length);
    if (!ini) {
        snprintf(message, size, "%s: no memory to read it", name);
        return -ENOMEM;
    }
    struct parse p = {
        .ini = ini, .at = text, .end = text + length, .message = message, .size = size};
    if (length >= 3 && memcmp(text, bom, 3) == 0)
        p.at += 3;
    int line = ini_parse_stream(read_line, &p, take, &p);
    if (p.r != 0)
        return p.r;
    if (line != 0) {
        p.line = line;
        return refuse(&p, "the line is not understood; [NAME], KEY = VALUE and comments beginning "
                          "with # are accepted");
    }
    *ret = ini;
    ini = NULL;
    return 0;
}

int inifile_load(struct inifile **ret, const char *path, char *message, size_t size) {
    scoped(free_p) char *text = NULL;
    size_t length;
    int r = files_read(path, INIFILE_BYTES_MAX, &text, &length);

    if (r == -EFBIG)
        snprintf(message, size, "%s: longer than %d KiB; this is no file for here", path,
                 INIFILE_BYTES_MAX / 1024);
    else if (r < 0)
        snprintf(message, size, "%s: cannot be read: %s", path, strerror(-r));
    return r < 0 ? r : inifile_parse(ret, text, length, path, message, size);
}

void inifile_free(struct inifile *ini) {
    free(ini);
}

void inifile_free_p(struct inifile **ini) {
    inifile_free(*ini);
}

const struct inifile_section *inifile_section(const struct inifile *ini, size_t i) {
    return i < ini->n_sections ? &ini->section[i] : NULL;
}

const struct inifile_entry *inifile_entry(const struct inifile *ini, size_t i) {
    return i < ini->n_entries ? &ini->entry[i] : NULL;
}

const struct inifile_entry *inifile_find(const struct inifile *ini, const char *section,
                                         const char *key) {
    for (size_t i = 0; i < ini->n_entries; i++)
        if (strcmp(ini->entry[i].section, section) == 0 && strcmp(ini->entry[i].key, key) == 0)
            return &ini->entry[i];
    return NULL;
}

const char *inifile_name(const struct inifile *ini) {
    return ini->pool;
}
