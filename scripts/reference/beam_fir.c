// Delay-and-sum by FIR filters of 64 taps in the time domain, in C: the speed
// reference of method sinc.
//
//   cc -O3 -march=native -ffast-math -o beam_fir beam_fir.c -lm
//   beam_fir TAKE.wav BEAM.txt OUT.wav [TAPS]
//
// TAKE is PCM, 24 bit. BEAM has a line a channel: the delay in seconds by which
// the wave arrives later there, and the amplitude. OUT is mono, 24 bit.
#include "wav24.h"

#define HOP 2048
#define MAXTAPS 1024

static double bessel0(double x) {
    double sum = 1, term = 1;
    for (int k = 1; term > sum * 1e-17; k++) {
        term *= x / (2 * k) * (x / (2 * k));
        sum += term;
    }
    return sum;
}

int main(int argc, char **argv) {
    if (argc < 4) {
        fprintf(stderr, "use: beam_fir TAKE.wav BEAM.txt OUT.wav [TAPS]\n");
        return 2;
    }
    int taps = argc > 4 ? atoi(argv[4]) : 64;
    if (taps < 2 || taps > MAXTAPS || taps % 2) {
        fprintf(stderr, "taps: an even number up to %d\n", MAXTAPS);
        return 2;
    }
    Wav in;
    wav_open(&in, argv[1]);
    double tau[MAXCH], amp[MAXCH];
    beam_read(argv[2], in.channels, tau, amp);

    // Reversed taps of each channel, and the place of the earliest sample.
    static float h[MAXCH][MAXTAPS];
    int start[MAXCH], before = 0, after = 0;
    double beta = 13;
    for (int m = 0; m < in.channels; m++) {
        double d = -tau[m] * in.rate;
        int whole = (int)floor(d);
        double frac = d - whole;
        start[m] = whole - taps / 2 + 1;
        for (int n = 0; n < taps; n++) {
            double u = n - (taps / 2 - 1) - frac, r = u / (taps / 2);
            double s = u == 0 ? 1 : sin(M_PI * u) / (M_PI * u);
            double w = bessel0(beta * sqrt(fmax(0, 1 - r * r))) / bessel0(beta);
            h[m][taps - 1 - n] = amp[m] * s * w;
        }
        if (start[m] + taps - 1 > before) before = start[m] + taps - 1;
        if (-start[m] > after) after = -start[m];
    }

    int width = before + HOP + after;
    float *x = calloc((size_t)in.channels * width, sizeof *x), y[HOP];
    FILE *out = wav_create(argv[3], in.rate, in.frames);
    long have = 0; // frames read
    int filled = before;
    for (long first = 0; first < in.frames; first += HOP) {
        while (filled < width && have < in.frames) {
            int n = wav_read(&in, x, width, filled, width - filled);
            if (n <= 0) break;
            have += n;
            filled += n;
        }
        for (int m = 0; m < in.channels; m++)
            memset(x + (size_t)m * width + filled, 0, (width - filled) * sizeof *x);
        memset(y, 0, sizeof y);
        for (int m = 0; m < in.channels; m++) {
            const float *restrict z = x + (size_t)m * width + before - (start[m] + taps - 1);
            const float *restrict g = h[m];
            // Eight taps a pass over the sums: loads and stores are shared.
            for (int t = 0; t + 8 <= taps; t += 8)
                for (int i = 0; i < HOP; i++)
                    y[i] += g[t] * z[i + t] + g[t + 1] * z[i + t + 1] + g[t + 2] * z[i + t + 2] + g[t + 3] * z[i + t + 3] +
                            g[t + 4] * z[i + t + 4] + g[t + 5] * z[i + t + 5] + g[t + 6] * z[i + t + 6] + g[t + 7] * z[i + t + 7];
            for (int t = taps / 8 * 8; t < taps; t++)
                for (int i = 0; i < HOP; i++)
                    y[i] += g[t] * z[i + t];
        }
        wav_write(out, y, in.frames - first < HOP ? in.frames - first : HOP);
        for (int m = 0; m < in.channels; m++)
            memmove(x + (size_t)m * width, x + (size_t)m * width + HOP, (width - HOP) * sizeof *x);
        filled = filled > HOP ? filled - HOP : 0;
    }
    fclose(out);
    return 0;
}
