package batch

import (
	"fmt"
	"strings"
)

// The engines that job files are made for.
const (
	Slurm      = "slurm"
	Kubernetes = "kubernetes"
	Parallel   = "parallel"
)

// engines are all of them.
var engines = []string{Slurm, Kubernetes, Parallel}

// JobFile is what goes into the job file of an engine.
type JobFile struct {
	Engine  string
	Plan    string // file of the plan, as the tasks open it
	Name    string // of the job: letters, digits and dashes
	Parts   int
	Workers int // of each task
	// MemoryMiB is what a worker needs at most.
	MemoryMiB int
	Image     string // of the container, for Kubernetes
	Claim     string // of the volume, for Kubernetes
}

// maxRestarts is how often a task is started again.
const maxRestarts = 5

// Text returns the job file. Nothing is submitted.
func (j JobFile) Text() (string, error) {
	j.Name = label(j.Name)
	switch j.Engine {
	case Slurm:
		return j.slurm(), nil
	case Kubernetes:
		return j.kubernetes(), nil
	case Parallel:
		return j.parallel(), nil
	}
	return "", fmt.Errorf("engine %q: want one of %s", j.Engine, strings.Join(engines, ", "))
}

// label makes a name that every engine takes: RFC 1123.
func label(name string) string {
	var b strings.Builder
	for _, r := range strings.ToLower(name) {
		if r >= 'a' && r <= 'z' || r >= '0' && r <= '9' {
			b.WriteRune(r)
		} else {
			b.WriteByte('-')
		}
	}
	text := strings.Trim(b.String(), "-")
	if len(text) > 50 {
		text = strings.Trim(text[:50], "-")
	}
	if text == "" {
		return "takes"
	}
	return text
}

// quoted is a word for a shell.
func quoted(text string) string {
	plain := func(r rune) bool {
		return r >= 'a' && r <= 'z' || r >= 'A' && r <= 'Z' || r >= '0' && r <= '9' || strings.ContainsRune("._-/+,=:@", r)
	}
	if text != "" && strings.IndexFunc(text, func(r rune) bool { return !plain(r) }) < 0 {
		return text
	}
	return "'" + strings.ReplaceAll(text, "'", `'\''`) + "'"
}

func (j JobFile) slurm() string {
	return fmt.Sprintf(`#!/bin/bash
# A job array of %[1]d parts. In the folder of the plan:
#   id=$(sbatch --parsable THIS_FILE)
#   sbatch --dependency=afterany:$id --output=%[2]s-merge.log --wrap %[7]s
# The merge says what is missing, if anything, and which parts would make it.
#SBATCH --job-name=%[2]s
#SBATCH --array=0-%[3]d
#SBATCH --requeue
#SBATCH --open-mode=append
#SBATCH --output=%[2]s-%%A_%%a.log
#SBATCH --signal=B:USR1@60
#SBATCH --cpus-per-task=%[4]d
#SBATCH --mem=%[5]dM
# A part that was interrupted, or whose storage failed, ends with exit code 75
# and puts itself back into the queue, %[6]d times at most.
alidade batch %[8]s --workers %[4]d --max-restarts %[6]d & pid=$!
trap 'kill -USR1 $pid 2>/dev/null' USR1 TERM   # a trap runs only during wait
while :; do wait $pid; rc=$?; kill -0 $pid 2>/dev/null || break; done
if [ $rc -eq 75 ]; then
  scontrol requeue "${SLURM_ARRAY_JOB_ID}_${SLURM_ARRAY_TASK_ID}" && sleep 60
fi
exit $rc
`, j.Parts, j.Name, j.Parts-1, max(j.Workers, 1), j.memory(), maxRestarts,
		quoted("alidade merge "+quoted(j.Plan)+" --wait 60"), quoted(j.Plan))
}

// memory of a task: its workers, and room for the program itself.
func (j JobFile) memory() int { return 256 + max(j.Workers, 1)*max(j.MemoryMiB, 128) }

func (j JobFile) kubernetes() string {
	const mount = "/data"
	return fmt.Sprintf(`# An indexed job of %[1]d parts. The claim must be readable and writable from
# all nodes (ReadWriteMany) and hold the plan, its rigs and the takes.
#   kubectl apply -f THIS_FILE
# and, with bash 4.3 or later, until all parts are done or some have failed for good:
#   bash -c 'for c in complete failed; do kubectl wait --for=condition=$c --timeout=-1s job/%[2]s & done; wait -n; kill $(jobs -pr)'
# Then, in either case, run once, where the claim is mounted: alidade merge %[7]s --wait 60
apiVersion: batch/v1
kind: Job
metadata:
  name: %[2]s
spec:
  completionMode: Indexed
  completions: %[1]d
  parallelism: %[1]d
  backoffLimitPerIndex: %[5]d
  maxFailedIndexes: %[1]d
  podReplacementPolicy: TerminatingOrFailed
  template:
    metadata:
      labels: {app: %[2]s}
    spec:
      restartPolicy: Never
      automountServiceAccountToken: false
      terminationGracePeriodSeconds: 30
      containers:
        - name: alidade
          image: %[3]q
          args: [batch, %[6]q, --workers, "%[8]d", --bad-takes-done]
          resources:
            requests: {cpu: "%[8]d", memory: %[9]dMi}
          volumeMounts:
            - {name: data, mountPath: %[10]s}
      volumes:
        - name: data
          persistentVolumeClaim: {claimName: %[4]q}
`, j.Parts, j.Name, j.Image, j.Claim, maxRestarts, mount+"/"+j.Plan, quoted(j.Plan), max(j.Workers, 1), j.memory(), mount)
}

func (j JobFile) parallel() string {
	return fmt.Sprintf(`#!/bin/sh
# %[1]d parts with GNU parallel, one at a time on each machine. In the folder of
# the plan:
#   sh THIS_FILE
# or, on machines that see the folder under the same path:
#   sh THIS_FILE --sshlogin host1,host2 --workdir .
# A part that was interrupted, or whose storage failed, is started again, %[2]d
# times at most, elsewhere if there is an elsewhere.
seq 1 %[1]d | parallel -q --jobs 1 --retries %[2]d --joblog %[3]s-parallel.log "$@" \
  alidade batch %[4]s --workers %[5]d --part {}/%[1]d --bad-takes-done
exec alidade merge %[4]s --wait 60
`, j.Parts, maxRestarts, j.Name, quoted(j.Plan), max(j.Workers, 1))
}
