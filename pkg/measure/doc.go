// Package measure turns signals into numbers: levels in bands over time, and
// the gain between two signals with its interval.
package measure
