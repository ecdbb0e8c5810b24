package calibration

import (
	"container/heap"
	"math"
)

// runningMedian is the median of numbers that come one by one: two heaps, the
// lower half with its largest at the top, the upper half with its smallest.
// A number costs the logarithm of how many there are.
type runningMedian struct {
	low, high numbers // low holds the negatives
}

func (r *runningMedian) count() int { return len(r.low) + len(r.high) }

// add takes another number. The upper half holds the odd one.
func (r *runningMedian) add(v float64) {
	if len(r.low) == len(r.high) {
		heap.Push(&r.low, -v)
		heap.Push(&r.high, -heap.Pop(&r.low).(float64))
		return
	}
	heap.Push(&r.high, v)
	heap.Push(&r.low, -heap.Pop(&r.high).(float64))
}

// median is the middle of the numbers so far, the upper one of two, as median
// has it; NaN of none.
func (r *runningMedian) median() float64 {
	if len(r.high) == 0 {
		return math.NaN()
	}
	return r.high[0]
}

// numbers are a heap with the smallest at the top.
type numbers []float64

func (n numbers) Len() int           { return len(n) }
func (n numbers) Less(i, j int) bool { return n[i] < n[j] }
func (n numbers) Swap(i, j int)      { n[i], n[j] = n[j], n[i] }
func (n *numbers) Push(v any)        { *n = append(*n, v.(float64)) }
func (n *numbers) Pop() any {
	last := len(*n) - 1
	v := (*n)[last]
	*n = (*n)[:last]
	return v
}
