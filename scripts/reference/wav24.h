// The smallest WAV reading and writing that the C programs need: PCM, 24 bit.
#include <math.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#define MAXCH 256

typedef struct {
    FILE *file;
    int channels, rate;
    long frames, left;
    uint8_t *raw;
    size_t room;
} Wav;

static void die(const char *what, const char *where) {
    fprintf(stderr, "%s: %s\n", where, what);
    exit(1);
}

static uint32_t le(const uint8_t *p, int n) {
    uint32_t v = 0;
    for (int i = 0; i < n; i++) v |= (uint32_t)p[i] << 8 * i;
    return v;
}

// wav_open leaves the file at the first sample.
static void wav_open(Wav *w, const char *path) {
    uint8_t b[40];
    memset(w, 0, sizeof *w);
    w->file = fopen(path, "rb");
    if (!w->file || fread(b, 1, 12, w->file) != 12 || memcmp(b, "RIFF", 4) || memcmp(b + 8, "WAVE", 4)) die("no RIFF/WAVE file", path);
    for (;;) {
        if (fread(b, 1, 8, w->file) != 8) die("no data chunk", path);
        uint32_t size = le(b + 4, 4);
        if (!memcmp(b, "data", 4)) {
            if (!w->channels) die("no fmt chunk before the data", path);
            w->frames = w->left = size / (3 * w->channels);
            return;
        }
        if (!memcmp(b, "fmt ", 4) && size >= 16 && size <= sizeof b) {
            if (fread(b, 1, size, w->file) != size) die("cut off", path);
            w->channels = le(b + 2, 2);
            w->rate = le(b + 4, 4);
            if (le(b + 14, 2) != 24 || w->channels < 1 || w->channels > MAXCH) die("want 24 bit, 1 to 256 channels", path);
            size = 0;
        }
        fseek(w->file, size + (size & 1), SEEK_CUR);
    }
}

// wav_read reads up to n frames into x[ch·width + at ...] and returns how many.
static int wav_read(Wav *w, float *x, int width, int at, int n) {
    if (n > w->left) n = w->left;
    size_t want = (size_t)n * 3 * w->channels;
    if (want + 4 > w->room) w->raw = realloc(w->raw, w->room = want + 4);
    n = fread(w->raw, 3 * w->channels, n, w->file);
    w->left -= n;
    for (int tile = 0; tile < n; tile += 64)
        for (int m = 0; m < w->channels; m++) {
            const uint8_t *p = w->raw + ((size_t)tile * w->channels + m) * 3;
            float *to = x + (size_t)m * width + at + tile;
            int end = n - tile < 64 ? n - tile : 64;
            for (int i = 0; i < end; i++, p += 3 * w->channels) {
                int32_t v;
                memcpy(&v, p, 4);
                to[i] = (float)((int32_t)((uint32_t)v << 8) >> 8) * (1 / 8388608.0f);
            }
        }
    return n;
}

static FILE *wav_create(const char *path, int rate, long frames) {
    uint8_t b[44] = "RIFF....WAVEfmt \x10\0\0\0\1\0\1\0........\3\0\x18\0data";
    uint32_t v[] = {36 + 3 * frames, rate, 3 * rate, 3 * frames};
    int at[] = {4, 24, 28, 40};
    for (int k = 0; k < 4; k++)
        for (int i = 0; i < 4; i++) b[at[k] + i] = v[k] >> 8 * i;
    FILE *f = fopen(path, "wb");
    if (!f || fwrite(b, 1, 44, f) != 44) die("not writable", path);
    return f;
}

static void wav_write(FILE *f, const float *y, int n) {
    static uint8_t b[3 * 65536];
    for (int i = 0; i < n; i++) {
        float s = y[i] * 8388608.0f;
        int32_t v = lrintf(s > 8388607 ? 8388607 : s < -8388608 ? -8388608 : s);
        b[3 * i] = v, b[3 * i + 1] = v >> 8, b[3 * i + 2] = v >> 16;
    }
    fwrite(b, 3, n, f);
}

// beam_read reads a line a channel: delay in seconds, amplitude.
__attribute__((unused)) static void beam_read(const char *path, int channels, double *tau, double *amp) {
    FILE *f = fopen(path, "r");
    if (!f) die("not readable", path);
    for (int m = 0; m < channels; m++)
        if (fscanf(f, "%lf %lf", tau + m, amp + m) != 2) die("want a line with delay and amplitude for every channel", path);
    fclose(f);
}
