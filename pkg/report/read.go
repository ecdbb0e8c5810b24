package report

import (
	"encoding/json"
	"fmt"
	"sync"

	"alidade/pkg/pipeline"
	"alidade/pkg/sheet"
)

// SchemaID is the $id of the JSON Schema of the report.
const SchemaID = "urn:alidade:schema:report:1"

// Schema returns the JSON Schema of the report. Keys may be added within a
// version, so it lets unknown ones pass.
func Schema() ([]byte, error) {
	return sheet.OpenSchemaOf(pipeline.Result{}, SchemaID, "Alidade report")
}

// compiled is the schema made ready, once.
var compiled = sync.OnceValues(func() (*sheet.Schema, error) {
	text, err := Schema()
	if err != nil {
		return nil, err
	}
	return sheet.NewSchema(text)
})

// Read reads a report. It must be of the version that this program writes and
// keep its schema; every place where it does not is a fault of the
// *sheet.FaultsError that comes back. Keys it does not know are passed over.
func Read(name string, data []byte) (*pipeline.Result, error) {
	schema, err := compiled()
	if err != nil {
		return nil, err
	}
	// The version first: the faults of another version mislead.
	var head struct {
		Schema any `json:"schema"`
	}
	if json.Unmarshal(data, &head) == nil && head.Schema != pipeline.ReportSchema {
		if head.Schema == nil {
			return nil, fmt.Errorf("%s: not a report: no key schema", name)
		}
		return nil, fmt.Errorf("%s: schema %q, want %q", name, fmt.Sprint(head.Schema), pipeline.ReportSchema)
	}
	var r pipeline.Result
	if err := sheet.DecodeJSON(name, data, schema, &r); err != nil {
		return nil, err
	}
	return &r, nil
}
