/* The config as understood, for `brinkd --effective`: every key, what it means, and what a figure
 * of one cell is for the whole pack. Comments stand on lines of their own, so that the text reads
 * back as it is. */
#include "daemon/config.h"
#include "daemon/keys.h"

#include <string.h>

static void print_key(const struct key *key, const void *base, FILE *out) {
    char value[KEY_VALUE_MAX], accepted[160];

    key_write(key, base, value, sizeof(value));
    fprintf(out, "# %s\n", key->help);
    if (key->type == KEY_NUMBER || key->type == KEY_WHOLE)
        fprintf(out, "# accepted: %s\n", key_accepted(key, accepted, sizeof(accepted)));
    if (value[0])
        fprintf(out, "%s = %s\n", key->name, value);
    else
        fprintf(out, "#%s =\n", key->name); /* left out: the unit has no such thing */
}

static void print_section(const char *section, const void *base, FILE *out) {
    for (size_t i = 0; i < n_keys; i++)
        if (strcmp(keys[i].section, section) == 0)
            print_key(&keys[i], base, out);
}

static void print_pack(const struct config_pack *pack, FILE *out) {
    const struct cell_table *table = &pack->table;

    fprintf(out, "\n[pack %s]\n", pack->name);
    fprintf(out, "# %d in series of %s (%s), %.3g cells in parallel by capacity\n", pack->series,
            table->name, table->chemistry, pack->capacity_Ah / table->capacity_Ah);
    fprintf(out, "# full at %.3f V, cells harmed under %.3f V of the pack\n",
            pack->series * table->full_V, pack->series * table->damage_V);
    fprintf(out, "# cutoff_rest: %.3f V of the pack at rest, a charge of %.1f %%\n",
            pack->series * pack->cutoff_rest_V, 100 * ocv_charge(&table->ocv, pack->cutoff_rest_V));
    fprintf(out, "# floor: %.3f V of the pack under load\n", pack->series * pack->floor_V);
    fprintf(out, "# cutoff_charge: %.3f V of the pack at rest\n",
            pack->series * ocv_voltage(&table->ocv, pack->cutoff_charge));
    print_section("pack", pack, out);
}

void config_print(const struct config *config, FILE *out) {
    static const char *const before[] = {"unit", "gauge"};
    static const char *const after[] = {"ladder", "stop", "files"};

    fprintf(out, "# The config as brinkd understands it, defaults included; see brink.conf(5).\n");
    for (size_t i = 0; i < sizeof(before) / sizeof(before[0]); i++) {
        fprintf(out, "\n[%s]\n", before[i]);
        print_section(before[i], config, out);
    }
    for (size_t i = 0; i < config->n_packs; i++)
        print_pack(&config->pack[i], out);
    for (size_t i = 0; i < sizeof(after) / sizeof(after[0]); i++) {
        fprintf(out, "\n[%s]\n", after[i]);
        print_section(after[i], config, out);
    }
}
