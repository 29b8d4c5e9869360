/* The two doubles that are no figures. math.h's NAN and INFINITY are floats, which
 * -Wdouble-promotion refuses. */
#pragma once

#include <math.h>

#define UNKNOWN ((double)NAN)      /* not told, not known */
#define ENDLESS ((double)INFINITY) /* a time without an end in sight */
