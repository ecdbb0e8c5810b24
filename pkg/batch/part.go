package batch

import (
	"fmt"
	"strconv"
	"strings"
)

// arrayIndex is an environment variable in which an engine passes a task its
// index, and what the first index is.
type arrayIndex struct {
	name  string
	first int
}

// arrayIndices are those of the engines, in the order in which they are looked
// for.
var arrayIndices = []arrayIndex{
	{"SLURM_ARRAY_TASK_ID", 0}, {"JOB_COMPLETION_INDEX", 0}, {"AWS_BATCH_JOB_ARRAY_INDEX", 0},
	{"BATCH_TASK_INDEX", 0}, {"PBS_ARRAY_INDEX", 0}, {"LSB_JOBINDEX", 1}, {"SGE_TASK_ID", 1},
}

// PartOf returns which part of parts is to be done, from 0, or -1 for all of
// them, and where that was said. A flag K/N (K from 1) wins; without one it is
// the index that an engine puts into the environment, and two that differ are
// refused. A plan of one part needs no index.
func PartOf(flag string, parts int, env func(string) string) (part int, source string, err error) {
	if flag != "" {
		a, b, ok := strings.Cut(flag, "/")
		k, kerr := strconv.Atoi(a)
		n, nerr := strconv.Atoi(b)
		switch {
		case !ok || kerr != nil || nerr != nil || k < 1 || k > n:
			return 0, "", fmt.Errorf("--part %q: want K/N with K from 1 to N", flag)
		case n != parts:
			return 0, "", fmt.Errorf("--part %s: the plan has %d parts", flag, parts)
		}
		return k - 1, "--part " + flag, nil
	}
	part = -1
	for _, v := range arrayIndices {
		text := env(v.name)
		if text == "" || text == "undefined" || v.first == 1 && text == "0" {
			continue // not an array task
		}
		k, err := strconv.Atoi(text)
		if err != nil || k < v.first {
			return 0, "", fmt.Errorf("%s=%q: not an index", v.name, text)
		}
		if k -= v.first; part >= 0 && k != part {
			return 0, "", fmt.Errorf("%s says part %d and %s says part %d: say which with --part K/%d", source, part+1, v.name, k+1, parts)
		}
		if part < 0 {
			part, source = k, v.name
		}
	}
	if part >= parts {
		if parts == 1 {
			return -1, "", nil // an array task that carries out a plan that was not cut
		}
		return 0, "", fmt.Errorf("%s: part %d: the plan has %d parts", source, part+1, parts)
	}
	if part < 0 && parts > 1 {
		return -1, "all parts", nil
	}
	return part, source, nil
}

// Restarts returns how often the engine has started this task again, 0 where
// it does not say.
func Restarts(env func(string) string) int {
	if n, err := strconv.Atoi(env("SLURM_RESTART_COUNT")); err == nil {
		return n
	}
	// Counts attempts from 1.
	if n, err := strconv.Atoi(env("AWS_BATCH_JOB_ATTEMPT")); err == nil {
		return max(n-1, 0)
	}
	return 0
}
