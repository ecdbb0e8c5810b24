// Package pipeline takes one recording from file to result.
package pipeline
