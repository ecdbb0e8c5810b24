package report

import (
	"context"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"github.com/chromedp/cdproto/cdp"
	"github.com/chromedp/cdproto/emulation"
	paper "github.com/chromedp/cdproto/page"
	"github.com/chromedp/chromedp"

	"alidade/pkg/pipeline"
)

// TestPicturesToLookAt judges nothing: it takes pictures of the pages, in light
// and dark, narrow and printed, into the folder that ALIDADE_SHOTS names, and of
// the pages that ALIDADE_PAGES lists.
func TestPicturesToLookAt(t *testing.T) {
	dir := os.Getenv("ALIDADE_SHOTS")
	if dir == "" {
		t.Skip("ALIDADE_SHOTS names no folder")
	}
	ctx := browser(t)
	pages := map[string][]byte{"folder": folderPage(t, 40)}
	for name, r := range map[string]*pipeline.Result{"good": picturedTake(), "bare": bareTake(), "bad": badRig(), "followed": followedTake()} {
		pages[name] = page(t, r)
	}
	for _, path := range filepath.SplitList(os.Getenv("ALIDADE_PAGES")) {
		text, err := os.ReadFile(path)
		if err != nil {
			t.Fatal(err)
		}
		pages[strings.TrimSuffix(filepath.Base(path), ".html")] = text
	}
	keep := func(name string, data []byte, err error) {
		t.Helper()
		if err == nil {
			err = os.WriteFile(filepath.Join(dir, name), data, 0o666)
		}
		if err != nil {
			t.Fatal(err)
		}
	}
	for name, text := range pages {
		url := save(t, name, text)
		for look, scheme := range map[string]string{"light": "light", "dark": "dark", "narrow": "light"} {
			width := int64(1280)
			if look == "narrow" {
				width = 390
			}
			feature := []*emulation.MediaFeature{{Name: "prefers-color-scheme", Value: scheme}}
			emulate := chromedp.Func(func(ctx context.Context, t *chromedp.Target) error {
				_, err := cdp.Call(ctx, t, emulation.SetEmulatedMedia, emulation.SetEmulatedMediaParams{Features: feature})
				return err
			})
			if err := chromedp.Do(ctx, emulate); err != nil {
				t.Fatal(err)
			}
			visit(t, ctx, url, width)
			data, err := chromedp.Run(ctx, chromedp.FullScreenshot(90))
			keep(name+"-"+look+".jpg", data, err)
		}
		printed, err := chromedp.Run(ctx, func(ctx context.Context, t *chromedp.Target) ([]byte, error) {
			r, err := cdp.Call(ctx, t, paper.PrintToPDF, paper.PrintToPDFParams{PaperWidth: 8.27, PaperHeight: 11.69}) // A4
			return r.Data, err
		})
		keep(name+".pdf", printed, err)
	}
}
