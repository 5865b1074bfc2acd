package usertable

import (
	"encoding/base64"
	"os"
	"path/filepath"
	"testing"
)

// Two columns that differ in the case of their letters are one, and one column may
// be wanted as number and as text; texts of other encodings are read.
func TestColumnsOfTwoUses(t *testing.T) {
	dir := t.TempDir()
	want := []Column{{Name: "r50"}, {Name: "R50"}, {Name: ""}, {Name: "R50", Text: true}}
	// BINARY2: a byte of flags, then 1.5 as a big-endian double; twice.
	row := "\x00\x3f\xf8\x00\x00\x00\x00\x00\x00"
	for name, text := range map[string]string{
		"text":   "R50\n1.5\n1.5\n",
		"latin1": "<?xml version=\"1.0\" encoding=\"ISO-8859-1\"?><VOTABLE><TABLE><DESCRIPTION>Observaci\xf3n</DESCRIPTION><FIELD name=\"R50\" datatype=\"double\"/><DATA><TABLEDATA><TR><TD>1.5</TD></TR><TR><TD>1.5</TD></TR></TABLEDATA></DATA></TABLE></VOTABLE>",
		"binary": `<VOTABLE><TABLE><FIELD name="R50" datatype="double"/><DATA><BINARY2><STREAM encoding="base64">` + base64.StdEncoding.EncodeToString([]byte(row+row)) + `</STREAM></BINARY2></DATA></TABLE></VOTABLE>`,
	} {
		path := filepath.Join(dir, name)
		if err := os.WriteFile(path, []byte(text), 0o644); err != nil {
			t.Fatal(err)
		}
		got, err := Read(path, want)
		if err != nil {
			t.Errorf("%s: %v", name, err)
			continue
		}
		numbers, texts := got.Numbers("r50"), got.Texts("r50")
		if got.Rows != 2 || len(numbers) != 2 || len(texts) != 2 || numbers[1] != 1.5 || texts[1] != "1.5" {
			t.Errorf("%s: %d rows, %v, %q", name, got.Rows, numbers, texts)
		}
	}
	path := filepath.Join(dir, "odd")
	if err := os.WriteFile(path, []byte(`<?xml version="1.0" encoding="none-such"?><VOTABLE/>`), 0o644); err != nil {
		t.Fatal(err)
	}
	if _, err := Read(path, want); err == nil {
		t.Error("an encoding that nobody knows is read")
	}
}
