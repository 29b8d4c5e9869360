/* A picture of a fitted table: SVG 1.1, curve above with the rests it was moved by, resistances
 * below, both over charge, axes with units. */
#pragma once

#include "bench/fit.h"

#include <stdio.h>

void plot_fit(const struct fit *fit, FILE *out);
