package batch

import (
	"context"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"

	batchv1 "k8s.io/api/batch/v1"
	corev1 "k8s.io/api/core/v1"
	"sigs.k8s.io/yaml"
)

// The manifest is decoded strictly into the types of the Kubernetes API, version
// batch/v1: a field that is misspelt, doubled or of another type fails. What
// the API asks of an indexed job beyond that is in its reference, "Jobs:
// completion mode, backoff limit per index".
func TestTheManifestIsAJobOfKubernetes(t *testing.T) {
	for _, j := range []JobFile{
		{Plan: "night.plan.json", Name: "night", Parts: 1, Image: "alidade", Claim: "takes"},
		{Plan: `a "night": 7 %.plan.json`, Name: "A night!", Parts: 1000, Workers: 3, MemoryMiB: 333, Image: "registry.example:5000/sound/alidade:0.1", Claim: "takes: all"},
	} {
		j.Engine = Kubernetes
		text, err := j.Text()
		if err != nil {
			t.Fatal(err)
		}
		var job batchv1.Job
		if err := yaml.UnmarshalStrict([]byte(text), &job); err != nil {
			t.Fatalf("%v\n%s", err, text)
		}
		s := job.Spec
		if job.APIVersion != batchv1.SchemeGroupVersion.String() || job.Kind != "Job" || job.Name != label(j.Name) {
			t.Errorf("%s %s %q", job.APIVersion, job.Kind, job.Name)
		}
		if s.CompletionMode == nil || *s.CompletionMode != batchv1.IndexedCompletion || s.Completions == nil || *s.Completions != int32(j.Parts) ||
			s.Parallelism == nil || *s.Parallelism != int32(j.Parts) || s.BackoffLimitPerIndex == nil || *s.BackoffLimitPerIndex != maxRestarts ||
			s.MaxFailedIndexes == nil || *s.MaxFailedIndexes > *s.Completions ||
			s.PodReplacementPolicy == nil || *s.PodReplacementPolicy != batchv1.TerminatingOrFailed || s.PodFailurePolicy != nil {
			t.Errorf("%+v", s)
		}
		pod := s.Template.Spec
		// A limit per index needs pods that are not started again in place.
		if pod.RestartPolicy != corev1.RestartPolicyNever || len(pod.Containers) != 1 || len(pod.Volumes) != 1 || pod.AutomountServiceAccountToken == nil || *pod.AutomountServiceAccountToken {
			t.Fatalf("%+v", pod)
		}
		c := pod.Containers[0]
		if i := slices.Index(c.Args, "batch"); i != 0 || c.Args[1] != "/data/"+j.Plan || c.Image != j.Image {
			t.Errorf("arguments %q of image %q", c.Args, c.Image)
		}
		if got, want := c.Resources.Requests.Memory().Value(), int64(j.memory())<<20; got != want {
			t.Errorf("memory %d, want %d bytes", got, want)
		}
		if got := c.Resources.Requests.Cpu().Value(); got != int64(max(j.Workers, 1)) {
			t.Errorf("%d cores", got)
		}
		if len(c.VolumeMounts) != 1 || c.VolumeMounts[0].Name != pod.Volumes[0].Name || c.VolumeMounts[0].ReadOnly ||
			pod.Volumes[0].PersistentVolumeClaim == nil || pod.Volumes[0].PersistentVolumeClaim.ClaimName != j.Claim {
			t.Errorf("mounts %+v of %+v", c.VolumeMounts, pod.Volumes)
		}
		// The decoding is strict indeed.
		for _, spoilt := range []string{
			strings.Replace(text, "completions:", "completionsMode: x\n  completions:", 1),
			strings.Replace(text, "parallelism:", "completions: 2\n  parallelism:", 1),
			strings.Replace(text, "restartPolicy: Never", "restartPolicy: [Never]", 1),
		} {
			if err := yaml.UnmarshalStrict([]byte(spoilt), &batchv1.Job{}); err == nil || spoilt == text {
				t.Errorf("accepted:\n%s", spoilt)
			}
		}
	}
}

// A job ends complete or failed (Kubernetes API reference, JobStatus: "A job is
// considered finished when it is in a terminal condition, either Complete or
// Failed"): the wait that is printed returns in both cases, and leaves no
// process. A stand-in for kubectl waits for one of them for ever.
func TestTheWaitForAJobEndsWhenItFails(t *testing.T) {
	if _, err := exec.LookPath("bash"); err != nil {
		t.Skip("no bash here")
	}
	text, err := JobFile{Engine: Kubernetes, Plan: "night.plan.json", Name: "night", Parts: 3, Image: "alidade", Claim: "takes"}.Text()
	if err != nil {
		t.Fatal(err)
	}
	wait := ""
	for _, line := range strings.Split(text, "\n") {
		if strings.HasPrefix(line, "#   bash ") {
			wait = strings.TrimPrefix(line, "#   ")
		}
	}
	if wait == "" {
		t.Fatalf("no line to wait with:\n%s", text)
	}
	for _, ends := range []string{"complete", "failed"} {
		dir := t.TempDir()
		stub := "#!/bin/sh\necho $$ \"$*\" >>" + dir + "/calls\ncase $2 in --for=condition=" + ends + ") while [ $(wc -l <" + dir + "/calls) -lt 2 ]; do sleep 0.02; done; exit;; esac\nexec sleep 60\n"
		if err := os.WriteFile(filepath.Join(dir, "kubectl"), []byte(stub), 0o777); err != nil {
			t.Fatal(err)
		}
		ctx, cancel := context.WithTimeout(t.Context(), 20*time.Second)
		cmd := exec.CommandContext(ctx, "sh", "-c", wait)
		cmd.Env = append(os.Environ(), "PATH="+dir+string(os.PathListSeparator)+os.Getenv("PATH"))
		cmd.WaitDelay = time.Second
		out, err := cmd.Output() // returns when no process holds its output
		cancel()
		calls, _ := os.ReadFile(filepath.Join(dir, "calls"))
		if err != nil || len(out) > 0 {
			t.Errorf("%s: %v\n%s%s", ends, err, out, calls)
		}
		for _, c := range []string{"complete", "failed"} {
			if want := "wait --for=condition=" + c + " --timeout=-1s job/night\n"; !strings.Contains(string(calls), want) {
				t.Errorf("%s: %q not among\n%s", ends, want, calls)
			}
		}
	}
}
