/* Polynomials of segments: Horner's rule with every product and sum rounded by itself, in this order in every kernel,
 * so that all give the same bits. LM_TARGET may name the instruction set.
 */
#ifndef LM_TARGET
#define LM_TARGET
#endif

#define EVALUATE(name, type)                                                                                           \
    LM_TARGET static inline void evaluate_##name(const type coefficient[][LM_SOFT_SEGMENTS], const type x[],           \
                                                 const uint8_t segment[], size_t n, type out[])                        \
    {                                                                                                                  \
        for (size_t i = 0; i < n; i++) {                                                                               \
            const uint8_t s = segment[i];                                                                              \
            const type t = (x[i] - coefficient[LM_SOFT_CENTRE][s]) * coefficient[LM_SOFT_STRETCH][s];                  \
            type sum = coefficient[LM_SOFT_DEGREE][s];                                                                 \
            for (int k = LM_SOFT_DEGREE - 1; k >= 0; k--)                                                              \
                sum = sum * t + coefficient[k][s];                                                                     \
            out[i] = sum;                                                                                              \
        }                                                                                                              \
    }
EVALUATE(f32, float)
EVALUATE(f64, double)
#undef EVALUATE
