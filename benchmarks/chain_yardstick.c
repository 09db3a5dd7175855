/* The fast loop's recurrence in C, as a yardstick for the compiled Python kernel.
 *
 * Same arithmetic, same layout, same polynomials; one Newton pass, knee or pure law,
 * lambda 0, no half-drain network. Built by benchmarks/engine_speed.py with
 *   gcc -O3 -march=native -ffp-contract=fast -fno-math-errno -fno-trapping-math
 * and used by nothing else.
 */
#include <math.h>
#include <stdint.h>
#include <string.h>

#ifndef S
#define S 4
#endif
#ifndef L
#define L 32
#endif
#ifndef SOFT
#define SOFT 1
#endif
#ifndef FRM
#define FRM 3
#endif

static inline double falling_exp(double t) {
    double y = -(t < 700.0 ? t : 700.0) * 1.4426950408889634;
    double shifted = y + 6755399441055744.0;
    double f = y - (shifted - 6755399441055744.0);
    double ff = f * f;
    double low = (0.9999999999616821 + f * 0.6931471807284479) +
                 ff * (0.2402265119815727 + f * 0.05550410353445137);
    double high = (0.009618027253699243 + f * 0.001333392256591591) +
                  ff * (0.0001546929113225414 + f * 1.5201921024283159e-05);
    double p = low + (ff * ff) * high;
    int64_t a, b;
    memcpy(&a, &p, 8);
    memcpy(&b, &shifted, 8);
    a += (int64_t)((uint64_t)b << 52);
    memcpy(&p, &a, 8);
    return p;
}

static inline void positive(double x, double w, double pw, double *p, double *s) {
#if SOFT
    double z = falling_exp(fabs(x) * pw);
    double one = 1.0 + z, two = 2.0 + z, both = 1.0 / (one * two);
    double r = z * one * both, rr = r * r, r4 = rr * rr;
    double q = (1.9999999998028117 + rr * 0.6666667930743927) +
               r4 * ((0.3999869090287265 + rr * 0.2862072210959956) +
                     r4 * (0.21393250634891134 + rr * 0.24413068113489214));
    double upper = x >= 0.0 ? 1.0 : z;
    *p = (x > 0.0 ? x : 0.0) + w * r * q;
    *s = upper * two * both;
#else
    *p = x > 0.0 ? x : 0.0;
    *s = x > 0.0 ? 1.0 : 0.0;
#endif
}

static double Q[S][L], G1[S][L], G2[S][L], G3[S][L], V1[S][L], V2[S][L], V3[S][L], V4[S][L];
static double HIST[S][L], V[S][L], D[S][L], AL[S][L], BD[S][L], P[S][L], QQ[S][L];
static double X[L], Y[L], F[L], CH[L], TOP[L];

/* lane: (5, S, L); stage: (9, S); x, gate, out: (frames, L) */
void run(long frames, const double *restrict x, const double *restrict gate,
         double *restrict out, const double *restrict lane, const double *restrict stage) {
    memset(Q, 0, sizeof Q); memset(G1, 0, sizeof G1); memset(G2, 0, sizeof G2);
    memset(G3, 0, sizeof G3); memset(V1, 0, sizeof V1); memset(V2, 0, sizeof V2);
    memset(V3, 0, sizeof V3); memset(V4, 0, sizeof V4); memset(QQ, 0, sizeof QQ);
    memset(CH, 0, sizeof CH); memset(TOP, 0, sizeof TOP); memset(F, 0, sizeof F);
    for (long n = 0; n < frames; n++) {
        for (int j = 0; j < L; j++) { X[j] = x[n * L + j]; Y[j] = 0.0; }
        for (int s = 0; s < S; s++) {
            double hs = stage[0 * S + s], a = stage[1 * S + s], b = stage[2 * S + s];
            double c = stage[3 * S + s], w0 = stage[4 * S + s], w1 = stage[5 * S + s];
            double w2 = stage[6 * S + s], w3 = stage[7 * S + s];
            const double *vc = lane + (0 * S + s) * L, *hbeta = lane + (1 * S + s) * L;
            const double *w = lane + (3 * S + s) * L, *pw = lane + (4 * S + s) * L;
            for (int j = 0; j < L; j++) {
                double u = gate[n * L + j] - vc[j], p, sl, pd, sd;
                positive(u, w[j], pw[j], &p, &sl);
                double past = w1 * G1[s][j] + w2 * G2[s][j] + w3 * G3[s][j] + Q[s][j];
                double v = 4.0 * (V1[s][j] + V3[s][j]) - 6.0 * V2[s][j] - V4[s][j];
                positive(u - v, w[j], pw[j], &pd, &sd);
#if SOFT
                double bend = -(sd * sd + pd * sd * (1.0 - sd) * pw[j]);
#else
                double bend = -sd;
#endif
                double g = hbeta[j] * (p * p - pd * pd) + hs * v;
                double dg = hbeta[j] * (2.0 * pd * sd) + hs;
                double d = 1.0 / (1.0 + w0 * dg);
                double al = v - d * (v + w0 * g + past);
                HIST[s][j] = past; V[s][j] = v; D[s][j] = d; AL[s][j] = al;
                BD[s][j] = hbeta[j] * bend;
                double px = X[j], gain = a * d - b;
                P[s][j] = px;
                X[j] = gain * px + a * al;
                if (FRM >= 0) {
                    double qx = Y[j];
                    QQ[s][j] = qx;
                    Y[j] = gain * qx - c;
                }
            }
            if (s == FRM)
                for (int j = 0; j < L; j++) F[j] = X[j] / (1.0 - Y[j]);
        }
        if (FRM >= 0)
            for (int j = 0; j < L; j++) X[j] += Y[j] * F[j];
        for (int s = 0; s < S; s++) {
            double w0 = stage[4 * S + s], per_w0 = 1.0 / w0;
            for (int j = 0; j < L; j++) {
                double xs = P[s][j];
                if (FRM >= 0) xs += QQ[s][j] * F[j];
                double v = D[s][j] * xs + AL[s][j];
                double move = v - V[s][j], am = fabs(move), ax = fabs(xs);
                CH[j] = am > CH[j] ? am : CH[j];
                if (s > 0) TOP[j] = ax > TOP[j] ? ax : TOP[j];
                double past = HIST[s][j];
                double g = (xs - v - past) * per_w0 + BD[s][j] * move * move;
                G3[s][j] = G2[s][j]; G2[s][j] = G1[s][j]; G1[s][j] = g;
                Q[s][j] = past + w0 * g;
                V4[s][j] = V3[s][j]; V3[s][j] = V2[s][j]; V2[s][j] = V1[s][j]; V1[s][j] = v;
            }
        }
        for (int j = 0; j < L; j++) {
            double ax = fabs(X[j]);
            TOP[j] = ax > TOP[j] ? ax : TOP[j];
            out[n * L + j] = X[j];
        }
    }
}
