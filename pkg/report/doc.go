// Package report renders the result of a take as JSON, CSV, a terminal summary
// and a page.
//
// # Conventions
//
// The JSON form of a pipeline.Result is the report; everything else is made
// from it and can be made again from it. Keys stand in the order of the Go
// fields, list entries one a line, so that two reports compare line by line.
// Numbers are rounded to what is claimed: levels and level differences to
// 0.001 dB, angles to 0.001°, times to 1 µs, lengths to 1 µm, everything else
// to nine significant digits. A quantity that could not be measured is null.
// Not-a-number and infinity never leave: as a measured quantity they become
// null, anywhere else they are an error.
//
// Text from files (names, paths, messages) is shown as it stands except for
// characters that would steer a terminal or turn the line around, which are
// replaced by U+FFFD.
//
// # Use
//
//	r, err := report.Read("take.report.json", data)
//	if err != nil {
//		return err
//	}
//	if err := report.Summary(os.Stdout, r, 80); err != nil {
//		return err
//	}
//	return report.CSV(table, r)
//
// # Sources
//
// RFC 8259 (JSON), RFC 4180 (CSV). IEC 61260-1:2014 for the bands and their
// nominal names.
package report
