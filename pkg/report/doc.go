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
// The page of a take (HTML) and the page of a folder (Index) are one file each
// that needs nothing else: a Content-Security-Policy with the hashes of the one
// style and the one script forbids the network and everything that a text from
// a file might try to run. A page is made of the report as it is written, so
// that its figures are the report's. Preview audio, where a report carries it,
// travels in the page: whoever sends it along sends people's voices along.
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
//	if err := report.CSV(table, r); err != nil {
//		return err
//	}
//	return report.HTML(page, r, report.Assets{Report: "take.report.json"})
//
// Longer than 2,000 lines because the page explains every figure to someone who
// has nothing else, and its charts are drawn here.
//
// # Sources
//
// RFC 8259 (JSON), RFC 4180 (CSV). IEC 61260-1:2014 for the bands and their
// nominal names. Content Security Policy Level 3 and Web Audio API 1.0, W3C.
// Web Content Accessibility Guidelines 2.2, W3C, 2023.
package report
