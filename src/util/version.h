/* The product's version: every program's --version and the manuals' foot. */
#pragma once

#define BRINK_VERSION "0.1.0"
