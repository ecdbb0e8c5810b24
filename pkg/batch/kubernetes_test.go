package batch

import (
	"slices"
	"strings"
	"testing"

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
