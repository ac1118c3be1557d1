/* The reserve option of reserve.py in C, one function for each format. INVENTED DATA.

   Every expression has the operations of the Python code in its order; how they round is the compiler's choice:

   each by itself, as the format does:
       gcc -O2 -shared -fPIC -fexcess-precision=16 -ffp-contract=off -o rounded.so reserve.c -lm
   wider intermediates within an expression, GCC's default for _Float16:
       gcc -O2 -shared -fPIC -ffp-contract=off -o wider.so reserve.c -lm
   products fused into sums, on a processor that can:
       gcc -O2 -shared -fPIC -fexcess-precision=16 -ffp-contract=fast -mfma -o fused.so reserve.c -lm
*/

#include <math.h>
#include <stddef.h>

enum { PRICE_START, PRICE_LEVEL, PRICE_REVERSION, PRICE_VOLATILITY, INFLOW_START, INFLOW_LEVEL, INFLOW_REVERSION,
       INFLOW_VOLATILITY, CORRELATION, TURBINE_LIMIT, FEE, RATE, PARAMETERS };

/* Numbers of the audit file meet each other in double, and are rounded once where they meet the state. */
#define KERNEL(NAME, T, SQRT)                                                                                         \
int NAME(const T *dW, size_t steps, size_t factors, size_t paths, double h, const double *p, size_t count,            \
         T *out, size_t outputs)                                                                                      \
{                                                                                                                     \
    if (factors != 2 || count != PARAMETERS || outputs != 2) return 1;                                                \
    const double length = steps * h, pull = p[PRICE_REVERSION] * h, inflow_pull = p[INFLOW_REVERSION] * h;            \
    const T a = pull, x_level = p[PRICE_LEVEL], x_volatility = p[PRICE_VOLATILITY];                                   \
    const T b = inflow_pull, q_level = p[INFLOW_LEVEL], q_volatility = p[INFLOW_VOLATILITY];                          \
    const T shared = p[CORRELATION], independent = sqrt(1.0 - p[CORRELATION] * p[CORRELATION]);                       \
    const T limit = p[TURBINE_LIMIT], fee = p[FEE], step = h, span = length, discount = exp(-p[RATE] * length);       \
    for (size_t i = 0; i < paths; i++) {                                                                              \
        T x = p[PRICE_START], q = p[INFLOW_START], total = 0;                                                         \
        for (size_t n = 0; n < steps; n++) {                                                                          \
            const T dV = dW[2 * n * paths + i], dU = dW[(2 * n + 1) * paths + i];                                     \
            const T water = q > 0 ? q : (T)0, used = water < limit ? water : limit;                                   \
            total = total + used * step;                                                                              \
            const T dB = shared * dV + independent * dU;                                                              \
            x = x + (a * (x_level - x) + x_volatility * dV);                                                          \
            q = q + (b * (q_level - water) + q_volatility * SQRT(water) * dB);                                        \
        }                                                                                                             \
        const T left = q > 0 ? q : (T)0, saved = x * left - fee;                                                      \
        out[i] = discount * (saved > 0 ? saved : (T)0);                                                               \
        out[paths + i] = total / span;                                                                                \
    }                                                                                                                 \
    return 0;                                                                                                         \
}

/* A square root in float, then rounded to half precision, is the root rounded once: 24 >= 2 x 11 + 2 bits. */
KERNEL(value_float16, _Float16, (_Float16)sqrtf)
KERNEL(value_float32, float, sqrtf)
KERNEL(value_float64, double, sqrt)
