/* The clean steps of op-amps as they are, written for one size: N states of which the last K are inner voltages of
   op-amps, G walls. M has one row each of N + 4 values (states, signal at the start, its mean, its end, 1): the states,
   then the op-amps' rates, the walls and the output's mean. Compiled by the benchmark with N, K and G given. */

enum { CHUNK = 128, ROWS = N + K + G + 1 };

static double track[N][CHUNK + 1];
static double rows[ROWS][CHUNK];

/* Steps taken before any limit; u holds one value before and two beyond the steps. ext: highest and lowest of the K
   inner voltages, G walls and K rates. */
long clean_steps(const double *M, int columns, const double *u, long steps, double *v, const double *low,
                 const double *high, double *ext, double *out)
{
    long done = 0;
    while (done < steps) {
        int count = steps - done < CHUNK ? (int)(steps - done) : CHUNK;
        const double *w = u + done;
        for (int r = 0; r < ROWS; r++) {
            const double *m = M + (long)r * columns;
            const double m1 = m[N + 1] / 24.0, a = m[N] + 13.0 * m1, b = m[N + 2] + 13.0 * m1, c = m[N + 3];
            double *d = rows[r];
            for (int i = 0; i < count; i++)
                d[i] = -m1 * (w[i] + w[i + 3]) + a * w[i + 1] + b * w[i + 2] + c;
        }
        double x[N];
        for (int s = 0; s < N; s++)
            track[s][0] = x[s] = v[s];
        for (int i = 0; i < count; i++) {
            double y[N];
            for (int r = 0; r < N; r++) {
                y[r] = rows[r][i];
                for (int s = 0; s < N; s++)
                    y[r] += M[(long)r * columns + s] * x[s];
            }
            for (int r = 0; r < N; r++)
                track[r][i + 1] = x[r] = y[r];
        }
        for (int r = N; r < ROWS; r++) {
            const double *m = M + (long)r * columns;
            double *d = rows[r];
            for (int i = 0; i < count; i++) {
                double t = d[i];
                for (int s = 0; s < N; s++)
                    t += m[s] * track[s][i];
                d[i] = t;
            }
        }
        for (int e = 0; e < 2 * K + G; e++) {
            const double *d = e < K ? track[N - K + e] + 1 : (e < K + G ? rows[N + K + e - K] : rows[N + e - K - G]);
            double most = d[0], least = d[0];
            for (int i = 1; i < count; i++) {
                most = d[i] > most ? d[i] : most;
                least = d[i] < least ? d[i] : least;
            }
            if (most > high[e] || least < low[e])
                return done;
            ext[2 * e] = most > ext[2 * e] ? most : ext[2 * e];
            ext[2 * e + 1] = least < ext[2 * e + 1] ? least : ext[2 * e + 1];
        }
        for (int s = 0; s < N; s++)
            v[s] = track[s][count];
        for (int i = 0; i < count; i++)
            out[done + i] = rows[ROWS - 1][i];
        done += count;
    }
    return done;
}
