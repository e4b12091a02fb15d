/* Tells from which sources this library was compiled: see __init__.py. */
#include "kernels.h"

EXPORT const char *const edgewatch_sources = SOURCES;
