/* The squid axon's Na, K and leak conductances stepped straight from their formulas.
 *
 * The plain counterpart of gatestep's kernel, for comparison: the same scheme (gates
 * across the tick on the mean of its two end voltages with the exact solution for a
 * held voltage, current at the newest voltage), with rates from exp() instead of a
 * table. Hodgkin and Huxley 1952, J. Physiol. 117:500-544, in the modern sign with
 * rest at -65 mV. Units: mV, ms, nS, pA.
 *
 * squid_run carries the gates over a whole series of voltages in one call, so that
 * the cost of calling does not count.
 */
#include <math.h>

/* k * z / (1 - exp(-z)) with z = x / k; at x = 0 it takes its limit. */
static double linoid(double x, double k)
{
    double z = x / k;
    if (fabs(z) < 1e-6)
        return k * (1.0 + 0.5 * z);
    return x / (1.0 - exp(-z));
}

static double relax(double x, double alpha, double beta, double dt_ms)
{
    double rate = alpha + beta;
    double inf = alpha / rate;
    return inf + (x - inf) * exp(-dt_ms * rate);
}

/* x is {m, h, n}; gmax_ns and reversal_mv are those of Na, K and leak. */
static double squid_step(double *x, const double *gmax_ns, const double *reversal_mv,
                         double v_old_mv, double v_new_mv, double dt_ms)
{
    double v = 0.5 * (v_old_mv + v_new_mv);
    x[0] = relax(x[0], 0.1 * linoid(v + 40.0, 10.0), 4.0 * exp(-(v + 65.0) / 18.0), dt_ms);
    x[1] = relax(x[1], 0.07 * exp(-(v + 65.0) / 20.0), 1.0 / (1.0 + exp(-(v + 35.0) / 10.0)),
                 dt_ms);
    x[2] = relax(x[2], 0.01 * linoid(v + 55.0, 10.0), 0.125 * exp(-(v + 65.0) / 80.0), dt_ms);

    double n2 = x[2] * x[2];
    double na = gmax_ns[0] * x[0] * x[0] * x[0] * x[1] * (reversal_mv[0] - v_new_mv);
    double k = gmax_ns[1] * n2 * n2 * (reversal_mv[1] - v_new_mv);
    return na + k + gmax_ns[2] * (reversal_mv[2] - v_new_mv);
}

/* i_pa[t] for t in 1..count-1: the current after the tick from v_mv[t - 1] to v_mv[t]. */
void squid_run(double *x, const double *gmax_ns, const double *reversal_mv, const double *v_mv,
               long count, double dt_ms, double *i_pa)
{
    for (long t = 1; t < count; t++)
        i_pa[t] = squid_step(x, gmax_ns, reversal_mv, v_mv[t - 1], v_mv[t], dt_ms);
}
