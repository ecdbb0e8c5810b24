package sheet

import (
	"fmt"
	"strings"
	"testing"
	"time"
)

var places = []Column{{"name", true}, {"x_mm", true}, {"gain_db", false}}

func TestTableGivesCellsAndNumbers(t *testing.T) {
	tab := ParseTable("p.csv", []byte("\ufeffx_mm, name ,gain_db\r\n# a comment\r\n1.5,\"a, b\",\r\n,,\r\n-2e1, c ,0.25\r\n"), places)
	if err := tab.Err(); err != nil {
		t.Fatal(err)
	}
	if tab.Rows() != 2 || fmt.Sprint(tab.Columns()) != "[x_mm name gain_db]" {
		t.Fatalf("%d rows of %v", tab.Rows(), tab.Columns())
	}
	if name, ok := tab.Text(0, "name"); !ok || name != "a, b" {
		t.Errorf("name is %q, %v", name, ok)
	}
	if x, ok := tab.Number(1, "x_mm"); !ok || x != -20 {
		t.Errorf("x_mm is %v, %v", x, ok)
	}
	if g, ok := tab.Number(0, "gain_db"); ok || g != 0 {
		t.Errorf("an empty cell is %v, %v", g, ok)
	}
	if _, ok := tab.Text(0, "nothing"); ok {
		t.Error("a column that is not there has a cell")
	}
	if _, ok := tab.Text(7, "name"); ok {
		t.Error("a row that is not there has a cell")
	}
	if err := tab.Err(); err != nil {
		t.Errorf("looking made faults: %v", err)
	}
}

func TestTableFaultsComeAtOnceWithTheirPlace(t *testing.T) {
	tab := ParseTable("p.csv", []byte("nmae,x_mm,x_mm,,colour\nä,zero\nb,1,2,3,4\nc,inf,0,0,0\n"), places)
	for row := range tab.Rows() {
		tab.Number(row, "x_mm")
	}
	const want = `p.csv:1:1: nmae: unknown column, did you mean "name"?
p.csv:1:1: missing column "name"
p.csv:1:11: x_mm: column given twice
p.csv:1:16: column 4 has no name
p.csv:1:17: colour: unknown column, known are name, x_mm, gain_db
p.csv:2:1: 2 cells, want 5 as in the header
p.csv:2:3: x_mm: got "zero", want number
p.csv:4:3: x_mm: got "inf", want number`
	if err := tab.Err(); err == nil || err.Error() != want {
		t.Errorf("got\n%v\nwant\n%s", err, want)
	}
}

func TestTableRefusesWhatItCannotRead(t *testing.T) {
	for _, c := range []struct{ text, want string }{
		{"", "p.csv:1:1: the file is empty"},
		{"\n\n", "p.csv:1:1: the file is empty"},
		{"name,x_mm\n\"a,1\n", "not readable as CSV"},
		{"name,x_mm\na\"b,1\n", `p.csv:2:2: not readable as CSV: bare " in non-quoted-field`},
		{"name,x_mm\na\xff,1\n", "p.csv:2:2: byte 0xff is not utf-8"},
		{strings.Repeat("x,", 5000) + "x\n", "5001 columns, at most 1000 are read"},
		{strings.Repeat("\n", MaxMarks+1), "lines, at most 50000 are read"},
		{strings.Repeat("x", MaxBytes+1), "at most 4194304 are read"},
	} {
		tab := ParseTable("p.csv", []byte(c.text), places)
		if err := tab.Err(); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%.30q: got %v, want %q", c.text, err, c.want)
		}
	}
}

func TestTablePlacesCountCharactersAndCostLittle(t *testing.T) {
	tab := ParseTable("p.csv", []byte("näme,x_mm\n\"é\né\",öö,ü\n音,zwölf\n"), nil)
	for _, c := range []struct {
		row       int
		column    string
		line, col int
	}{{0, "näme", 2, 1}, {0, "x_mm", 3, 4}, {1, "x_mm", 4, 3}} {
		if l, col := tab.Place(c.row, c.column); l != c.line || col != c.col {
			t.Errorf("row %d, %s: %d:%d, want %d:%d", c.row, c.column, l, col, c.line, c.col)
		}
	}
	start := time.Now()
	for _, text := range []string{
		"name,x_mm\n" + strings.Repeat("é,1\n", 49_000), strings.Repeat("é", 2<<20-4), "name\n" + strings.Repeat(",", 4_000_000),
		"name\n" + strings.Repeat(strings.Repeat("é,", 900)+"\n", 1500),
	} {
		ParseTable("p.csv", []byte(text), places).Err()
	}
	if took := time.Since(start); took > 5*time.Second {
		t.Errorf("four large tables took %v", took)
	}
}

func FuzzTableNeverPanicsAndFindsItsFaultsInTheText(f *testing.F) {
	f.Add("name,x_mm\na,1\n")
	f.Add("\ufeffname , x_mm\r\n\"a\"\"\n\",1\r\n")
	f.Add("é,,é\n# x\n,,\n")
	f.Fuzz(func(t *testing.T, text string) {
		for _, known := range [][]Column{places, nil} {
			tab := ParseTable("p.csv", []byte(text), known)
			for row := range tab.Rows() {
				for _, c := range tab.Columns() {
					tab.Number(row, c)
				}
			}
			err := tab.Err()
			if err == nil {
				continue
			}
			for _, fault := range err.(*FaultsError).Faults {
				if fault.Line < 1 || fault.Line > strings.Count(tab.text, "\n")+1 || fault.Column < 1 {
					t.Fatalf("a fault out of place: %+v in %q", fault, text)
				}
			}
		}
	})
}

func TestTableWithoutKnownColumnsTakesEveryHeader(t *testing.T) {
	tab := ParseTable("o.csv", []byte("take,toward,anything\nx,60,1\n"), nil)
	if err := tab.Err(); err != nil || fmt.Sprint(tab.Columns()) != "[take toward anything]" {
		t.Errorf("%v, %v", err, tab.Columns())
	}
	tab.Fault(0, "toward", "got %d, want less", 60)
	tab.Fault(9, "toward", "no such row")
	if err := tab.Err(); err == nil || err.Error() != "o.csv:1:1: toward: no such row\no.csv:2:3: toward: got 60, want less" {
		t.Errorf("got %v", err)
	}
}
