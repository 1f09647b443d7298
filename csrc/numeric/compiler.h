/* What the compiler must be told: which functions are public, and which results must not be dropped. */
#ifndef LM_COMPILER_H
#define LM_COMPILER_H

/* LM_HIDDEN is set where the library is built into something else, as in the Python module, which exports nothing. */
#if defined(__GNUC__) && !defined(LM_HIDDEN)
#define LM_API __attribute__((visibility("default")))
#else
#define LM_API
#endif

#if defined(__GNUC__)
#define LM_MUST_USE __attribute__((warn_unused_result))
#define LM_ALWAYS_INLINE static inline __attribute__((always_inline))
#else
#define LM_MUST_USE
#define LM_ALWAYS_INLINE static inline
#endif

/* Forward a failure; only where the calling function owns nothing yet. */
#define LM_TRY(call)                                                                                                   \
    do {                                                                                                               \
        lm_status lm_try_status_ = (call);                                                                             \
        if (lm_try_status_ != LM_OK)                                                                                   \
            return lm_try_status_;                                                                                     \
    } while (0)

#define LM_LENGTH(array) (sizeof(array) / sizeof((array)[0]))

#endif
