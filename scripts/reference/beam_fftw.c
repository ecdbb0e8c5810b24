// Delay-and-sum by overlap-save on FFTW, single precision, one thread: the speed
// reference of method spectral.
//
//   cc -O3 -march=native -ffast-math -o beam_fftw beam_fftw.c -lfftw3f -lm
//   beam_fftw TAKE.wav BEAM.txt OUT.wav SIZE HOP [WISDOM]
//
// Plans are measured (FFTW_MEASURE); with WISDOM, a file, they are kept there and
// read from there, so that a second run does not plan. The filters are windowed
// sincs of SIZE-HOP taps less the spread of the delays.
#include <complex.h>
#include <fftw3.h>

#include "wav24.h"

static double bessel0(double x) {
    double sum = 1, term = 1;
    for (int k = 1; term > sum * 1e-17; k++) {
        term *= x / (2 * k) * (x / (2 * k));
        sum += term;
    }
    return sum;
}

int main(int argc, char **argv) {
    if (argc < 6) {
        fprintf(stderr, "use: beam_fftw TAKE.wav BEAM.txt OUT.wav SIZE HOP [WISDOM]\n");
        return 2;
    }
    int size = atoi(argv[4]), hop = atoi(argv[5]), bins = size / 2 + 1;
    if (size < 16 || size > 1 << 20 || hop < 1 || hop > size - 2 || hop > 65536) {
        fprintf(stderr, "size 16 to 2^20, hop 1 to size-2 and at most 65536\n");
        return 2;
    }
    Wav in;
    wav_open(&in, argv[1]);
    double tau[MAXCH], amp[MAXCH];
    beam_read(argv[2], in.channels, tau, amp);

    int lo = 0, hi = 0;
    for (int m = 0; m < in.channels; m++) {
        int whole = (int)floor(-tau[m] * in.rate);
        if (m == 0 || whole < lo) lo = whole;
        if (m == 0 || whole > hi) hi = whole;
    }
    int taps = (size - hop + 1 - (hi - lo)) / 2 * 2;
    if (taps > 128) taps = 128;
    if (taps < 8) {
        fprintf(stderr, "size %d and hop %d leave %d taps\n", size, hop, taps);
        return 2;
    }
    int first = lo - taps / 2 + 1; // delay of tap 0 of every filter

    if (argc > 6) fftwf_import_wisdom_from_filename(argv[6]);
    float *t = fftwf_alloc_real(size);
    fftwf_complex *z = fftwf_alloc_complex(bins), *sum = fftwf_alloc_complex(bins);
    int step = (bins + 7) / 8 * 8 + 72; // FFTW wants its arrays aligned; off the same cache sets
    fftwf_complex *w = fftwf_alloc_complex((size_t)step * in.channels);
    fftwf_plan fwd = fftwf_plan_dft_r2c_1d(size, t, z, FFTW_MEASURE | FFTW_PRESERVE_INPUT);
    fftwf_plan inv = fftwf_plan_dft_c2r_1d(size, sum, t, FFTW_MEASURE | FFTW_DESTROY_INPUT);
    if (argc > 6) fftwf_export_wisdom_to_filename(argv[6]);

    for (int m = 0; m < in.channels; m++) {
        double d = -tau[m] * in.rate;
        int whole = (int)floor(d);
        double frac = d - whole, beta = 13;
        memset(t, 0, size * sizeof *t);
        for (int n = 0; n < taps; n++) {
            double u = n - (taps / 2 - 1) - frac, r = u / (taps / 2);
            double s = u == 0 ? 1 : sin(M_PI * u) / (M_PI * u);
            double k = bessel0(beta * sqrt(fmax(0, 1 - r * r))) / bessel0(beta);
            t[whole - taps / 2 + 1 - first + n] = amp[m] * s * k / size;
        }
        fftwf_execute_dft_r2c(fwd, t, w + (size_t)m * step);
    }

    // Output frame i needs frames i-first-(size-hop) ... i-first.
    int before = size - hop + first, after = -first;
    if (before < 0 || after < 0) {
        fprintf(stderr, "delays too far from zero\n");
        return 2;
    }
    int stride = ((size + 15) & ~15) + 144; // off the same cache sets, aligned
    float *x = fftwf_alloc_real((size_t)in.channels * stride);
    memset(x, 0, (size_t)in.channels * stride * sizeof *x);
    FILE *out = wav_create(argv[3], in.rate, in.frames);
    long have = 0;
    int filled = before;
    for (long at = 0; at < in.frames; at += hop) {
        while (filled < size && have < in.frames) {
            int n = wav_read(&in, x, stride, filled, size - filled);
            if (n <= 0) break;
            have += n;
            filled += n;
        }
        memset(sum, 0, bins * sizeof *sum);
        for (int m = 0; m < in.channels; m++) {
            float *xm = x + (size_t)m * stride;
            memset(xm + filled, 0, (size - filled) * sizeof *xm);
            fftwf_execute_dft_r2c(fwd, xm, z);
            const float *restrict a = (float *)z, *restrict b = (float *)(w + (size_t)m * step);
            float *restrict s = (float *)sum;
            for (int k = 0; k < bins; k++) {
                s[2 * k] += a[2 * k] * b[2 * k] - a[2 * k + 1] * b[2 * k + 1];
                s[2 * k + 1] += a[2 * k] * b[2 * k + 1] + a[2 * k + 1] * b[2 * k];
            }
        }
        fftwf_execute_dft_c2r(inv, sum, t);
        wav_write(out, t + size - hop, in.frames - at < hop ? in.frames - at : hop);
        for (int m = 0; m < in.channels; m++)
            memmove(x + (size_t)m * stride, x + (size_t)m * stride + hop, (size - hop) * sizeof *x);
        filled = filled > hop ? filled - hop : 0;
    }
    fclose(out);
    return 0;
}
