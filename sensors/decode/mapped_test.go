package decode

import (
	"encoding/json"
	"os"
	"testing"

	"sockline/sensors"
)

func TestMappedPayloads(t *testing.T) {
	data, err := os.ReadFile("../../testdata/wire/mapped.json")
	if err != nil {
		t.Fatal(err)
	}
	var table struct {
		Version int
		Cases   []struct {
			Name, Payload, Want, Reasons string
			Fields                       sensors.FieldMap
		}
	}
	if err := json.Unmarshal(data, &table); err != nil {
		t.Fatal(err)
	}
	if table.Version != 1 || len(table.Cases) < 60 {
		t.Fatalf("version %d with %d cases, want version 1 with at least 60", table.Version, len(table.Cases))
	}
	for _, row := range table.Cases {
		d := newDecoder(t, sensors.Station{Format: sensors.FormatJSON, Fields: &row.Fields})
		checkRows(t, d, []payloadRow{{row.Name, row.Payload, row.Want, row.Reasons}})
	}
}

func TestArrayIndex(t *testing.T) {
	// RFC 6901 section 4: digits without leading zeros.
	for key, want := range map[string]int{"0": 0, "17": 17, "01": -1, "-1": -1, "+1": -1, "a": -1, "": -1, "1e0": -1} {
		if got := arrayIndex(key); got != want {
			t.Errorf("arrayIndex(%q) = %d, want %d", key, got, want)
		}
	}
}
