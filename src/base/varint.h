/* varint: unsigned numbers in LEB128, seven bits a byte, low bits first; and zigzag for signed ones.
 *
 * Readers get an end and never read past it. A number that is cut off or longer than 64 bits makes
 * them return NULL, so that one check at the end of a loop sees every kind of damage.
 */
#ifndef WINDROW_BASE_VARINT_H
#define WINDROW_BASE_VARINT_H

#include <stddef.h>
#include <stdint.h>

#define WINDROW_VARINT_BYTES_MAX 10

/* Writes `value`; returns the byte after it. `out` has room for WINDROW_VARINT_BYTES_MAX bytes. */
static inline uint8_t *windrow_varint_put(uint8_t *out, uint64_t value)
{
    while (value >= 0x80) {
        *out++ = (uint8_t)(value | 0x80);
        value >>= 7;
    }
    *out++ = (uint8_t)value;
    return out;
}

/* Reads a number into *value; returns the byte after it, or NULL. */
static inline const uint8_t *windrow_varint_get(const uint8_t *in, const uint8_t *end, uint64_t *value)
{
    if (in < end && *in < 0x80) {
        *value = *in;
        return in + 1;
    }
    uint64_t result = 0;
    for (unsigned shift = 0; in < end && shift < 64; shift += 7) {
        uint8_t byte = *in++;
        if (shift == 63 && byte > 1)
            return NULL;
        result |= (uint64_t)(byte & 0x7f) << shift;
        if (byte < 0x80) {
            *value = result;
            return in;
        }
    }
    return NULL;
}

static inline uint64_t windrow_zigzag(uint64_t to, uint64_t from)
{
    int64_t difference = (int64_t)(to - from);
    return ((uint64_t)difference << 1) ^ (uint64_t)(difference >> 63);
}

static inline uint64_t windrow_unzigzag(uint64_t from, uint64_t coded)
{
    return from + ((coded >> 1) ^ (0 - (coded & 1)));
}

#endif
