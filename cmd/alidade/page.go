package main

import (
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"net/url"
	"os"
	"path/filepath"
	"slices"
	"strings"

	"github.com/urfave/cli/v2"

	"alidade/pkg/batch"
	"alidade/pkg/pipeline"
	"alidade/pkg/report"
)

const reportHelp = `alidade report: the page of a take made again, or the page of a folder

Usage
  alidade report FILE.report.json... [OPTIONS]
  alidade report DIR [OPTIONS]

Example
  $ alidade report roof_07_az+060.0.report.json --out pages/

A page is made of the JSON report alone and stands beside it. Of a folder the
reports in it and below are listed in a page that sorts and filters,
index.html, with links to the pages that stand beside the reports.

Options
  --out PATH      the page, or a folder for it
  --overwrite     replace a page that exists
  --help, -h      this text

A report of a run that made no page holds no pictures over time and angle: its
page does without them. Exit code 1 if not one page was made, 3 if some were
not.
`

func reportVerb() verb {
	return verb{
		name: "report", does: "the page of a take or of a folder, from its reports",
		help:  reportHelp,
		flags: func() []cli.Flag { return []cli.Flag{&cli.StringFlag{Name: "out"}, &cli.BoolFlag{Name: "overwrite"}} },
		run:   runReport,
	}
}

// The endings of report files, after the name of the track without its own.
var reportEndings = map[string]string{
	pipeline.ReportJSON: ".report.json", pipeline.ReportCSV: ".bands.csv", pipeline.ReportHTML: ".html",
}

// reportFile is the name of a report file of a track.
func reportFile(track, kind string) string {
	if ext := filepath.Ext(track); strings.EqualFold(ext, ".wav") {
		track = strings.TrimSuffix(track, ext)
	}
	return track + reportEndings[kind]
}

// renderers write the reports of a run with such options. folder is the page of
// the folder as seen from that of the take, or empty; tidy comes before each
// report unless it is nil.
func renderers(o pipeline.Options, folder string, tidy func(*pipeline.Result) *pipeline.Result) pipeline.Renderers {
	page := func(w io.Writer, r *pipeline.Result) error {
		track := filepath.Base(r.Output.Path)
		a := report.Assets{Folder: folder, Track: link(track)}
		kinds := strings.Split(o.Reports, ",")
		for kind, into := range map[string]*string{pipeline.ReportJSON: &a.Report, pipeline.ReportCSV: &a.Bands} {
			if o.Reports == "" || slices.ContainsFunc(kinds, func(k string) bool { return strings.TrimSpace(k) == kind }) {
				*into = link(reportFile(track, kind))
			}
		}
		return report.HTML(w, r, a)
	}
	list := pipeline.Renderers{pipeline.ReportJSON: report.JSON, pipeline.ReportCSV: report.CSV, pipeline.ReportHTML: page}
	if tidy == nil {
		return list
	}
	for kind, f := range list {
		list[kind] = func(w io.Writer, r *pipeline.Result) error { return f(w, tidy(r)) }
	}
	return list
}

// folderPage is the page of a batch as seen from the folder of a take of it.
func folderPage(key string) string {
	return strings.Repeat("../", strings.Count(key, "/")+1) + indexFile
}

// link is a file beside a page as its address.
func link(name string) string { return (&url.URL{Path: "./" + filepath.ToSlash(name)}).EscapedPath() }

// maxReportBytes bounds a report that is read whole: pictures and listening
// excerpts are a few megabytes.
const maxReportBytes = 64 << 20

func runReport(u *ui, c *cli.Context) error {
	args := c.Args().Slice()
	if len(args) == 0 {
		return &usageError{errors.New("report: no report: name a .report.json file or a folder of them"), "alidade report --help shows an example"}
	}
	folders := 0
	for _, name := range args {
		if info, err := os.Stat(name); err == nil && info.IsDir() {
			folders++
		}
	}
	if folders > 0 && len(args) > 1 {
		return &usageError{fmt.Errorf("report: %d arguments, one of them a folder: want report files, or one folder", len(args)), ""}
	}
	out := c.String("out")
	if folders == 1 {
		return u.reportFolder(c, args[0], out)
	}
	if info, err := os.Stat(out); len(args) > 1 && out != "" && !strings.HasSuffix(out, "/") && (err != nil || !info.IsDir()) {
		return &usageError{fmt.Errorf("report: --out %q: one page for %d reports: name a folder that exists, or end it in /", out, len(args)), ""}
	}
	var failed []error
	for _, name := range args {
		if err := c.Context.Err(); err != nil {
			return err
		}
		page, err := u.reportTake(name, out, c.Bool("overwrite"))
		if err != nil {
			if len(args) == 1 {
				return err
			}
			u.complain(err)
			failed = append(failed, err)
			continue
		}
		u.printf("wrote %s\n", page)
	}
	switch {
	case len(failed) == len(args):
		return &missedError{worstCode(failed), fmt.Errorf("not one of %d pages was made", len(args))}
	case len(failed) > 0:
		return &missedError{exitSome, fmt.Errorf("%d of %d pages were not made", len(failed), len(args))}
	}
	return nil
}

// reportTake makes the page of a report and returns its path.
func (u *ui) reportTake(name, out string, overwrite bool) (string, error) {
	data, err := readBounded(name, maxReportBytes)
	if err != nil {
		return "", err
	}
	r, err := report.Read(name, data)
	if err != nil {
		return "", &pipeline.HintedError{Err: err, Hint: "alidade steer writes reports, as TRACK.report.json"}
	}
	stem := name
	for _, ending := range []string{reportEndings[pipeline.ReportJSON], ".json"} {
		if s, ok := strings.CutSuffix(name, ending); ok && filepath.Base(s) != "" && !strings.HasSuffix(s, string(filepath.Separator)) {
			stem = s
			break
		}
	}
	page, err := pageAt(stem+reportEndings[pipeline.ReportHTML], out)
	if err != nil {
		return "", err
	}
	var a report.Assets
	if filepath.Dir(page) == filepath.Dir(name) {
		a.Report = link(filepath.Base(name))
		if key := batch.TakeIn(filepath.Dir(name)); key != "" {
			a.Folder = folderPage(key)
		}
		for path, into := range map[string]*string{stem + reportEndings[pipeline.ReportCSV]: &a.Bands, filepath.Join(filepath.Dir(name), filepath.Base(filepath.FromSlash(r.Output.Path))): &a.Track} {
			if info, err := os.Stat(path); err == nil && info.Mode().IsRegular() {
				*into = link(filepath.Base(path))
			}
		}
	}
	return page, pipeline.WriteWhole(page, overwrite, []string{name}, func(w io.Writer) error { return report.HTML(w, r, a) })
}

// pageAt is where a page goes: out, or in the folder out, or where it would
// stand anyway.
func pageAt(usual, out string) (string, error) {
	if out == "" {
		return usual, nil
	}
	if info, err := os.Stat(out); err == nil && info.IsDir() {
		return filepath.Join(out, filepath.Base(usual)), nil
	}
	if strings.HasSuffix(out, "/") || strings.HasSuffix(out, string(filepath.Separator)) {
		return filepath.Join(out, filepath.Base(usual)), os.MkdirAll(out, 0o777)
	}
	return out, nil
}

// maxFolderReports bounds the reports of a folder's page.
const maxFolderReports = 100000

// reportFolder makes the page of a folder of reports.
func (u *ui) reportFolder(c *cli.Context, dir, out string) error {
	page, err := pageAt(filepath.Join(dir, indexFile), out)
	if err != nil {
		return err
	}
	var list []string
	err = filepath.WalkDir(dir, func(path string, d fs.DirEntry, err error) error {
		switch {
		case c.Context.Err() != nil:
			return c.Context.Err()
		case err != nil:
			return err
		case d.IsDir() && strings.HasPrefix(d.Name(), ".") && path != dir:
			return fs.SkipDir // unfinished outputs
		case !d.IsDir() && strings.HasSuffix(d.Name(), reportEndings[pipeline.ReportJSON]) && !strings.HasPrefix(d.Name(), "."):
			if list = append(list, path); len(list) > maxFolderReports {
				return fmt.Errorf("%s: more than %d reports", dir, maxFolderReports)
			}
		}
		return nil
	})
	if err != nil {
		return err
	}
	if len(list) == 0 {
		return &pipeline.HintedError{Err: fmt.Errorf("%s: no report in it or below", dir), Hint: "alidade steer and alidade batch write them, as TRACK.report.json"}
	}
	var entries []report.Entry
	unread := 0
	for _, path := range list {
		stem := strings.TrimSuffix(path, reportEndings[pipeline.ReportJSON])
		rel, err := filepath.Rel(dir, stem)
		if err != nil {
			return err
		}
		e := report.Entry{Name: filepath.ToSlash(rel)}
		if e.Result, err = readShown(path); err != nil {
			e.Failure = "its report cannot be read: " + err.Error()
			unread++
		}
		if info, err := os.Stat(stem + reportEndings[pipeline.ReportHTML]); err == nil && info.Mode().IsRegular() {
			if to, err := filepath.Rel(filepath.Dir(page), stem+reportEndings[pipeline.ReportHTML]); err == nil {
				e.Link = link(to)
			}
		}
		entries = append(entries, e)
	}
	whole, err := filepath.Abs(dir)
	if err != nil {
		return err
	}
	index := func(w io.Writer) error { return report.Index(w, filepath.Base(whole), version, entries) }
	if err := pipeline.WriteWhole(page, c.Bool("overwrite"), list, index); err != nil {
		return err
	}
	u.printf("wrote %s: %d takes\n", page, len(entries))
	if unread > 0 {
		return &missedError{exitSome, fmt.Errorf("%d of %d reports could not be read", unread, len(entries))}
	}
	return nil
}

// readShown reads of a report what the page of a folder shows, and no further:
// pictures and excerpts, by far the most of it, come last.
func readShown(path string) (r *pipeline.Result, err error) {
	file, err := openBounded(path, maxReportBytes)
	if err != nil {
		return nil, err
	}
	defer func() { err = errors.Join(err, file.Close()) }()
	r = &pipeline.Result{}
	into := map[string]any{
		"schema": &r.Schema, "take": &r.Take, "rig": &r.Rig, "steer": &r.Steer, "overall": &r.Overall, "findings": &r.Findings,
	}
	d := json.NewDecoder(file)
	if t, err := d.Token(); err != nil || t != json.Delim('{') {
		return nil, fmt.Errorf("%s: not a report", path)
	}
	for len(into) > 0 && d.More() {
		key, err := d.Token()
		if err != nil {
			return nil, fmt.Errorf("%s: %w", path, err)
		}
		name, _ := key.(string)
		var passed json.RawMessage
		to := any(&passed)
		if wanted, ok := into[name]; ok {
			to = wanted
			delete(into, name)
		}
		if err := d.Decode(to); err != nil {
			return nil, fmt.Errorf("%s: %w", path, err)
		}
	}
	if r.Schema != pipeline.ReportSchema {
		return nil, fmt.Errorf("%s: schema %q, want %q", path, r.Schema, pipeline.ReportSchema)
	}
	return r, nil
}
