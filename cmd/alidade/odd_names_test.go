package main

import (
	"bytes"
	"context"
	"os"
	"path/filepath"
	"strings"
	"testing"
)

// Names of takes as real folders have them end no night: what a plan cannot
// carry is left out and named, what would steer a terminal is written out.
func TestOddNamesOfTakes(t *testing.T) {
	dir := t.TempDir()
	put := func(name, text string) {
		t.Helper()
		if err := os.WriteFile(filepath.Join(dir, name), []byte(text), 0o666); err != nil {
			t.Skipf("no file of such a name here: %v", err)
		}
	}
	put("rig.yaml", "rig: line of eight\nline: {count: 8, spacing_mm: 40}\n")
	put("job.yaml", "rig: rig.yaml\ntakes: [\"*.wav\"]\nexclude: [\"*_old.wav\"]\nsteer: {toward: 60}\n")
	for _, name := range []string{"new\nline.wav", "esc\x1b[31m.wav", "lat\xe9in.wav", "lat\xe9_old.wav", "turn\u202eed.wav", "-dash.wav", "back\\slash.wav"} {
		put(name, "no take")
	}
	var out, errs bytes.Buffer
	code := run(context.Background(), []string{"batch", filepath.Join(dir, "job.yaml"), "--quiet"}, nil, &out, &errs, func(string) string { return "" })
	if code != exitSome || !strings.Contains(out.String(), "5 takes, 0 done, 0 missed a limit, 5 failed") {
		t.Errorf("exit code %d, want %d and five takes that failed:\n%s%s", code, exitSome, out.String(), errs.String())
	}
	for _, want := range []string{`new\nline: new`, `esc\x1b[31m: `, `turn\u202eed: `, `back_slash: `} {
		if !strings.Contains(out.String(), want) {
			t.Errorf("%q is not in %q", want, out.String())
		}
	}
	if strings.ContainsAny(out.String(), "\x1b") || !strings.Contains(errs.String(), `"lat\xe9in.wav": left out`) {
		t.Errorf("standard output %q, standard error %q", out.String(), errs.String())
	}
	// A saved plan is read again, with what was left out by any name.
	for _, args := range [][]string{{"plan", filepath.Join(dir, "job.yaml"), "--out", filepath.Join(dir, "night.plan")}, {"batch", filepath.Join(dir, "night.plan"), "--quiet"}} {
		out.Reset()
		errs.Reset()
		if code := run(context.Background(), args, nil, &out, &errs, func(string) string { return "" }); code != 0 && code != exitSome {
			t.Errorf("%s: exit code %d: %s", args[0], code, errs.String())
		}
	}
}

// A rig that is not there is complained about once, not once a take, and a job
// that is no YAML for that alone.
func TestFaultsOfAJobAreSaidOnce(t *testing.T) {
	dir := t.TempDir()
	for name, text := range map[string]string{
		"a.wav": "no take", "b.wav": "no take", "c.wav": "no take",
		"job.yaml":  "rig: nope.yaml\ntakes: [\"*.wav\"]\nsteer: {toward: 60}\n",
		"torn.yaml": "rig: nope.yaml\ntakes: [\"*.wav\"\nsteer: {toward: 60}\n",
		"none.yaml": "",
	} {
		if err := os.WriteFile(filepath.Join(dir, name), []byte(text), 0o666); err != nil {
			t.Fatal(err)
		}
	}
	for job, want := range map[string]string{"job.yaml": "nope.yaml: no such file", "torn.yaml": "not readable as YAML", "none.yaml": "the file is empty"} {
		var out, errs bytes.Buffer
		code := run(context.Background(), []string{"plan", filepath.Join(dir, job)}, nil, &out, &errs, func(string) string { return "" })
		if code != exitUsage || strings.Count(errs.String(), "alidade: ") != 1 || !strings.Contains(errs.String(), want) {
			t.Errorf("%s: exit code %d, want %d and %q once:\n%s", job, code, exitUsage, want, errs.String())
		}
	}
}
