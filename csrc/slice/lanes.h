/* Registers of LM_VECTOR bytes as the compiler's vectors: the types of each reading, and how it is compared.
 *
 * For the bodies that are included once for each instruction set; LM_TARGET is the attribute of their functions.
 */
#ifndef INLINE
#define INLINE static inline __attribute__((always_inline)) LM_TARGET
#endif
#define LANES(type) (LM_VECTOR / sizeof(type))

#define TYPES(name, type, lane, key)                                                                                   \
    typedef type vec_##name __attribute__((vector_size(LM_VECTOR), aligned(sizeof(type)), may_alias));                 \
    typedef lane lanes_##name __attribute__((vector_size(LM_VECTOR)));                                                 \
    typedef u##lane sums_##name __attribute__((vector_size(LM_VECTOR))); /* they wrap */                               \
    typedef lane loaded_##name __attribute__((vector_size(LM_VECTOR), aligned(sizeof(type)), may_alias));              \
    typedef key keys_##name __attribute__((vector_size(LM_VECTOR)));                                                   \
    typedef uint8_t bytes_##name __attribute__((vector_size(LANES(type)), aligned(1), may_alias));
TYPES(i8, int8_t, int8_t, int8_t)
TYPES(u8, uint8_t, int8_t, int8_t)
TYPES(i16, int16_t, int16_t, int16_t)
TYPES(u16, uint16_t, int16_t, int16_t)
TYPES(i32, int32_t, int32_t, int32_t)
TYPES(u32, uint32_t, int32_t, int32_t)
TYPES(i64, int64_t, int64_t, int64_t)
TYPES(u64, uint64_t, int64_t, int64_t)
TYPES(f16, uint16_t, int16_t, int16_t)
TYPES(f32, float, int32_t, float)
TYPES(f64, double, int64_t, double)

/* Signed integers and floats compare as they are; unsigned ones with the top bit turned over, since registers compare
 * signed; binary16 by its key. */
#define AS_KEY(name, v) ((keys_##name)(v))
#define AS_IS_ONE(name, x) (x)
#define TOP(name) ((lanes_##name){0} + (lane_##name)((ulane_##name)1 << (8 * sizeof(lane_##name) - 1)))
#define TURNED(name, v) ((keys_##name)((lanes_##name)(v) ^ TOP(name)))
#define TURNED_ONE(name, x) ((lane_##name)((x) ^ (ulane_##name)((ulane_##name)1 << (8 * sizeof(lane_##name) - 1))))
#define F16_KEY(name, v) ((keys_##name)((lanes_##name)(v) ^ (((lanes_##name)(v) >> 15) & 0x7fff)))
#define NEVER(name, v) ((lanes_##name){0})
#define NEVER_ONE(x) false
#define UNEQUAL(name, v) ((v) != (v))
#define UNEQUAL_ONE(x) ((x) != (x))
#define F16_NAN(name, v) (((lanes_##name)(v) & 0x7fff) > LM_F16_INFINITY)
#define F16_NAN_ONE(x) (((x) & 0x7fff) > LM_F16_INFINITY)
typedef int8_t lane_u8;
typedef uint8_t ulane_u8;
typedef int16_t lane_u16;
typedef uint16_t ulane_u16;
typedef int32_t lane_u32;
typedef uint32_t ulane_u32;
typedef int64_t lane_u64;
typedef uint64_t ulane_u64;

#define F16_LIFT_ONE(name, x) lm_f16_key(x)

/* Sums of sizeof(type) registers, each lane from 0 to 255, to LM_VECTOR bytes. */
#ifndef NARROW
#define NARROW(name, type, sum, out)                                                                                   \
    do {                                                                                                               \
        _Pragma("GCC unroll 8") for (size_t narrow_r = 0; narrow_r < sizeof(type); narrow_r++) *                       \
            (bytes_##name *)((out) + narrow_r * LANES(type)) = __builtin_convertvector((sum)[narrow_r], bytes_##name); \
    } while (0)
#endif
