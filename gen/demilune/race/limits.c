/* The limits of a machine: how fast numbers can be summed from memory, and multiplied and added. */
#include <stddef.h>
#include <stdint.h>

/* The sum of n numbers with 8 vectors of VECTOR bytes: nothing is done but loading them. */
#define LIMITS(NAME, TYPE, VECTOR, TARGET)                                                     \
    typedef TYPE NAME##_t __attribute__((vector_size(VECTOR), aligned(sizeof(TYPE))));          \
    TARGET double sum_##NAME(const TYPE *a, int64_t n)                                          \
    {                                                                                           \
        enum { L = VECTOR / sizeof(TYPE) };                                                     \
        NAME##_t s0 = {0}, s1 = {0}, s2 = {0}, s3 = {0}, s4 = {0}, s5 = {0}, s6 = {0}, s7 = {0}; \
        int64_t i = 0;                                                                          \
        for (; i + 8 * L <= n; i += 8 * L) {                                                    \
            const NAME##_t *p = (const NAME##_t *)(a + i);                                      \
            s0 += p[0], s1 += p[1], s2 += p[2], s3 += p[3];                                     \
            s4 += p[4], s5 += p[5], s6 += p[6], s7 += p[7];                                     \
        }                                                                                       \
        for (; i + L <= n; i += L) {                                                            \
            s0 += *(const NAME##_t *)(a + i);                                                   \
        }                                                                                       \
        s0 = ((s0 + s1) + (s2 + s3)) + ((s4 + s5) + (s6 + s7));                                 \
        TYPE total = 0;                                                                         \
        for (int l = 0; l < L; l++) {                                                           \
            total += s0[l];                                                                     \
        }                                                                                       \
        for (; i < n; i++) {                                                                    \
            total += a[i];                                                                      \
        }                                                                                       \
        return total;                                                                           \
    }                                                                                           \
    /* 2 * 12 * L operations a pass, as fused multiply-adds of registers. */                    \
    TARGET double peak_##NAME(const TYPE *a, int64_t passes)                                    \
    {                                                                                           \
        enum { L = VECTOR / sizeof(TYPE) };                                                     \
        NAME##_t s[12], p, q;                                                                   \
        for (int l = 0; l < L; l++) {                                                           \
            p[l] = a[0], q[l] = a[1];                                                           \
        }                                                                                       \
        for (int c = 0; c < 12; c++) {                                                          \
            s[c] = p - p;                                                                       \
        }                                                                                       \
        for (int64_t i = 0; i < passes; i++) {                                                  \
            _Pragma("GCC unroll 12") for (int c = 0; c < 12; c++) {                             \
                s[c] = s[c] * p + q;                                                            \
            }                                                                                   \
        }                                                                                       \
        double total = 0;                                                                       \
        for (int c = 0; c < 12; c++) {                                                          \
            for (int l = 0; l < L; l++) {                                                       \
                total += s[c][l];                                                               \
            }                                                                                   \
        }                                                                                       \
        return total;                                                                           \
    }

#define PLAIN
LIMITS(portable_float32, float, 16, PLAIN)
LIMITS(portable_float64, double, 16, PLAIN)
#if defined(__x86_64__)
LIMITS(avx2_float32, float, 32, __attribute__((target("avx2,fma"))))
LIMITS(avx2_float64, double, 32, __attribute__((target("avx2,fma"))))
LIMITS(avx512_float32, float, 64, __attribute__((target("avx512f,avx512dq,avx512vl,fma"))))
LIMITS(avx512_float64, double, 64, __attribute__((target("avx512f,avx512dq,avx512vl,fma"))))
#else
LIMITS(neon_float32, float, 16, PLAIN)
LIMITS(neon_float64, double, 16, PLAIN)
#endif
