// Reads and decodes a take and writes its first channel: what every program of
// this kind costs at least.
//
//   cc -O3 -march=native -o copy24 copy24.c -lm
//   copy24 TAKE.wav OUT.wav
#include "wav24.h"

int main(int argc, char **argv) {
    enum { HOP = 2048 };
    if (argc != 3) {
        fprintf(stderr, "use: copy24 TAKE.wav OUT.wav\n");
        return 2;
    }
    Wav in;
    wav_open(&in, argv[1]);
    float *x = malloc(sizeof *x * in.channels * (HOP + 144));
    FILE *out = wav_create(argv[2], in.rate, in.frames);
    for (int n; (n = wav_read(&in, x, HOP + 144, 0, HOP)) > 0;) wav_write(out, x, n);
    fclose(out);
    return 0;
}
