// Package wav reads and writes WAV and RF64 files and keeps the metadata they carry.
package wav
