/* Our INI files (brink.conf and cell tables), read with inih and stricter than it: what inih lets
 * pass in silence is refused here, with the line.
 *
 *   # comment, ; comment         a line of its own; behind a value only " ;" begins one
 *   [section]                    each section once
 *   key = value                  each key once a section
 *       more of the value        an indented line goes on with the value above, joined by one space
 *
 * UTF-8, lines of at most 199 bytes (inih's buffer), files of at most 64 KiB. Key names hold
 * letters, digits, _ and -. An indented line may hold no "=": it would be a key that got lost in
 * the value above. No key may stand before the first section.
 */
#pragma once

#include <stddef.h>

enum { INIFILE_BYTES_MAX = 64 * 1024, INIFILE_SECTIONS_MAX = 64, INIFILE_ENTRIES_MAX = 512 };

enum inifile_error { INIFILE_E_SYNTAX = 1 };

struct inifile_section {
    const char *name;
    int line;
};

struct inifile_entry {
    const char *section;
    const char *key;
    const char *value; /* may be "" */
    int line;          /* where the key stands */
};

struct inifile;

/* name stands for the file in messages. Returns 0; INIFILE_E_SYNTAX or -errno with a message for
 * people, "name:line: what is wrong; what is accepted". ret is not touched then. */
int inifile_parse(struct inifile **ret, const char *text, size_t length, const char *name,
                  char *message, size_t size);
int inifile_load(struct inifile **ret, const char *path, char *message, size_t size);

void inifile_free(struct inifile *ini);
void inifile_free_p(struct inifile **ini);

/* In the order of the file; NULL from n on. Sections without a key are listed, too. All strings
 * live as long as ini. */
const struct inifile_section *inifile_section(const struct inifile *ini, size_t i);
const struct inifile_entry *inifile_entry(const struct inifile *ini, size_t i);
const struct inifile_entry *inifile_find(const struct inifile *ini, const char *section,
                                         const char *key);

/* What the file is called in messages. */
const char *inifile_name(const struct inifile *ini);

/* Writes "name:line: text" ("name: text" for line 0) and returns INIFILE_E_SYNTAX, for those who
 * check values. */
int inifile_refuse(const struct inifile *ini, int line, char *message, size_t size,
                   const char *format, ...) __attribute__((format(printf, 5, 6)));
