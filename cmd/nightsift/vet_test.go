package main

import (
	"bufio"
	"io"
	"net/http"
	"net/url"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"nightsift/internal/survey"
)

// The page is there under the address printed, stores a label, and ends with an
// interrupt.
func TestVetServesUntilInterrupted(t *testing.T) {
	dir, _ := newCatalogue(t)
	cmd := command("vet", "--survey", dir, "--reviewer", "Ada")
	out, err := cmd.StdoutPipe()
	if err != nil {
		t.Fatal(err)
	}
	if err := cmd.Start(); err != nil {
		t.Fatal(err)
	}
	defer cmd.Process.Kill()
	line, err := bufio.NewReader(out).ReadString('\n')
	if err != nil || !strings.HasPrefix(line, "http://127.0.0.1:") {
		t.Fatalf("%q, %v", line, err)
	}
	at := strings.TrimSpace(line)
	answer, err := http.PostForm(at+"label", url.Values{"candidate": {"c00"}, "verdict": {"bogus"}, "comment": {"ghost"}})
	if err != nil {
		t.Fatal(err)
	}
	page, err := io.ReadAll(answer.Body)
	answer.Body.Close()
	if err != nil || answer.StatusCode != 200 || !strings.Contains(string(page), "ghost") {
		t.Fatalf("%d, %v\n%.500s", answer.StatusCode, err, page)
	}
	if err := cmd.Process.Signal(os.Interrupt); err != nil {
		t.Fatal(err)
	}
	if err := cmd.Wait(); err != nil {
		t.Errorf("interrupted: %v, want exit code 0", err)
	}
	if list, _ := expect(t, 0, "catalog", "labels", "--survey", dir); !strings.Contains(list, "bogus") || !strings.Contains(list, "Ada") {
		t.Errorf("the label is not in the catalogue:\n%s", list)
	}
}

func TestVetRefuses(t *testing.T) {
	dir := filepath.Join(t.TempDir(), "survey")
	if err := survey.Init(dir); err != nil {
		t.Fatal(err)
	}
	for want, args := range map[string][]string{
		"--survey is needed": {"vet"},
		"YYYY-MM-DD":         {"vet", "--survey", dir, "--night", "today"},
		"--reviewer":         {"vet", "--survey", dir, "--reviewer", ""},
		"--listen":           {"vet", "--survey", dir, "--listen", "127.0.0.1:notaport"},
	} {
		if _, text := expect(t, 2, args...); !strings.Contains(text, want) {
			t.Errorf("%v: %q", args, text)
		}
	}
	if _, text := expect(t, 1, "vet", "--survey", dir); !strings.Contains(text, "no catalogue yet") {
		t.Errorf("without a catalogue: %q", text)
	}
	if files, err := filepath.Glob(filepath.Join(dir, "catalog*")); err != nil || len(files) > 0 {
		t.Errorf("vetting has made %v, %v", files, err)
	}
}
