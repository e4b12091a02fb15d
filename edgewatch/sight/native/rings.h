/* What a picture shows about a point. */
#ifndef EDGEWATCH_RINGS_H
#define EDGEWATCH_RINGS_H

#include <stdint.h>

typedef struct {
    const float *blurred;
    int32_t height, width;
} Blurred;

typedef struct {
    const float *along, *aside; /* number: places about the point, along the stream and to its side */
    float farthest;             /* and none of them is farther than this */
    int32_t number;
} Places;

/* The picture about (x, y) at places turned to the unit vector (c, s): out (number) gets log(1 + level * scale). */
void read_rings(const Blurred *picture, float x, float y, float c, float s, const Places *places, float scale, float *out);

/* How many ends of n pieces lie within radius of (x, y). */
int count_ends(double x, double y, int n, const double *begin, const double *end, double radius);

#endif
