/* Least squares within bounds: the x that makes x'Gx/2 - h'x least with low <= x <= high, G being
 * symmetric and positive definite. By the active-set method of P. B. Stark and R. L. Parker,
 * "Bounded-variable least squares: an algorithm and applications", Computational Statistics 10
 * (1995) 129-141, on normal equations; LAPACK solves them. */
#pragma once

#include <stddef.h>

enum { BOUNDED_MAX = 192 };

enum bounded_error {
    BOUNDED_E_SINGULAR = 1, /* G is not positive definite */
    BOUNDED_E_LONG,         /* did not come to an end */
};

/* G is n x n, row by row. x is the start on entry (bounds are applied to it) and the answer on
 * return. 0 or an enum bounded_error. n <= BOUNDED_MAX. */
int bounded_solve(size_t n, const double *G, const double *h, const double *low, const double *high,
                  double *x);
