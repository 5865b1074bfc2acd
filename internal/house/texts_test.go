package house

import (
	"fmt"
	"os"
	"os/exec"
	"path/filepath"
	"regexp"
	"slices"
	"strings"
	"sync"
	"testing"

	"nightsift/catalog"
	"nightsift/configs"
	"nightsift/detect"
	"nightsift/internal/frame"
)

func text(t *testing.T, name string) string {
	t.Helper()
	data, err := os.ReadFile(filepath.Join("../..", name))
	if err != nil {
		t.Fatal(err)
	}
	return string(data)
}

var folder string // for the program, removed at the end

func TestMain(m *testing.M) {
	var err error
	if folder, err = os.MkdirTemp("", "nightsift-house-"); err != nil {
		panic(err)
	}
	code := m.Run()
	os.RemoveAll(folder)
	os.Exit(code)
}

var build = sync.OnceValues(func() (string, error) {
	path := filepath.Join(folder, "nightsift")
	cmd := exec.Command("go", "build", "-o", path, "./cmd/nightsift")
	cmd.Dir = "../.."
	if out, err := cmd.CombinedOutput(); err != nil {
		return "", fmt.Errorf("go build: %w\n%s", err, out)
	}
	return path, nil
})

// program returns the path of the command, which is built once.
func program(t *testing.T) string {
	t.Helper()
	path, err := build()
	if err != nil {
		t.Fatal(err)
	}
	return path
}

func help(t *testing.T, program string, command ...string) string {
	t.Helper()
	out, err := exec.Command(program, append(slices.Clone(command), "--help")...).CombinedOutput()
	if err != nil {
		t.Fatalf("nightsift %s --help: %v\n%s", strings.Join(command, " "), err, out)
	}
	return string(out)
}

// commandsIn lists the sub-commands that a help text names.
func commandsIn(help string) []string {
	_, list, found := strings.Cut(help, "Available Commands:\n")
	if !found {
		return nil
	}
	var names []string
	for line := range strings.Lines(list) {
		if strings.TrimSpace(line) == "" {
			break
		}
		names = append(names, strings.Fields(line)[0])
	}
	return names
}

// shellLines returns the commands in the fenced blocks of a text, those that go
// on after a backslash joined, without prompts and comments.
func shellLines(markdown string) []string {
	var lines []string
	for i, block := range strings.Split(markdown, "```") {
		if i%2 == 0 {
			continue
		}
		_, body, _ := strings.Cut(block, "\n")
		for line := range strings.Lines(strings.ReplaceAll(body, "\\\n", " ")) {
			line, _, _ = strings.Cut(" "+line, " #")
			if line = strings.TrimSpace(line); line != "" {
				lines = append(lines, line)
			}
		}
	}
	return lines
}

var ownCommand = regexp.MustCompile(`(?:\./|/bin/|\b)nightsift ((?:[a-z]+)(?: .*)?)$`)

// Every command line in the texts names commands and flags that exist.
func TestCommandsInTextsExist(t *testing.T) {
	bin := program(t)
	top := commandsIn(help(t, bin))
	if len(top) < 8 {
		t.Fatalf("nightsift --help lists %q: the help has another form than this test reads", top)
	}
	for _, name := range []string{"README.md", "DEVELOPERS.md"} {
		checked := 0
		for _, line := range shellLines(text(t, name)) {
			m := ownCommand.FindStringSubmatch(line)
			if m == nil {
				continue
			}
			words := strings.Fields(m[1])
			if !slices.Contains(top, words[0]) {
				t.Errorf("%s: %q: there is no command %s", name, line, words[0])
				continue
			}
			command := words[:1]
			about := help(t, bin, command...)
			if sub := commandsIn(about); len(sub) > 0 {
				switch {
				case len(words) > 1 && slices.Contains(sub, words[1]):
					command = words[:2]
					about = help(t, bin, command...)
				case !regexp.MustCompile(`(?m)^  nightsift ` + words[0] + `.*\[flags\]$`).MatchString(about): // does nothing by itself
					t.Errorf("%s: %q: want one of %s", name, line, strings.Join(sub, ", "))
					continue
				}
			}
			for _, w := range words[len(command):] {
				flag, _, _ := strings.Cut(w, "=")
				if strings.HasPrefix(flag, "--") && !strings.Contains(about, " "+flag+" ") {
					t.Errorf("%s: %q: %s has no flag %s", name, line, strings.Join(command, " "), flag)
				}
			}
			checked++
		}
		if checked == 0 {
			t.Errorf("%s shows no command of the program, or this test does not find it", name)
		}
	}
}

// The README names every command, column, flag, reason, exit code and key.
func TestReadmeIsComplete(t *testing.T) {
	readme := text(t, "README.md")
	want := func(kind, name string) {
		if !strings.Contains(readme, "`"+name+"`") {
			t.Errorf("README.md does not name the %s `%s`", kind, name)
		}
	}
	for _, name := range commandsIn(help(t, program(t))) {
		if name != "help" && name != "completion" {
			want("command", "nightsift "+name)
		}
	}
	for _, c := range detect.Columns {
		want("candidate column", c.Name)
	}
	for _, s := range detect.Stamps {
		want("candidate column", s.Name)
	}
	for _, k := range detect.Kinds {
		want("kind", string(k))
	}
	for _, c := range catalog.FrameSheet(nil).Columns {
		want("frame column", c.Name)
	}
	for _, v := range catalog.Views {
		if v.Name == "view_objects" {
			for _, c := range v.Columns {
				want("object column", c.Name)
			}
		}
	}
	for _, f := range frame.FlagNames {
		want("flag", f.Name)
	}
	for _, slug := range constants(t, "internal/frame/frame.go", `Problem\w+ += "(\w+)"`) {
		want("reason", slug)
	}
	for _, code := range constants(t, "cmd/nightsift/main.go", `exit\w+ += (\d+)`) {
		want("exit code", code)
	}
	for _, section := range regexp.MustCompile(`(?m)^\[(\w+)\]$`).FindAllStringSubmatch(configs.Survey, -1) {
		want("section of survey.toml", "["+section[1]+"]")
	}
}

// constants finds values in a source file.
func constants(t *testing.T, path, pattern string) []string {
	t.Helper()
	var values []string
	for _, m := range regexp.MustCompile(pattern).FindAllStringSubmatch(text(t, path), -1) {
		values = append(values, m[1])
	}
	if len(values) < 4 {
		t.Fatalf("%s: %q finds %q: this test looks in the wrong place", path, pattern, values)
	}
	return values
}

// DEVELOPERS.md names every package, and every test file it sends readers to is
// there.
func TestDevelopersIsComplete(t *testing.T) {
	guide := text(t, "DEVELOPERS.md")
	for path := range packages(t) {
		if !strings.Contains(guide, "`"+path+"`") {
			t.Errorf("DEVELOPERS.md does not name the package `%s`", path)
		}
	}
	links := regexp.MustCompile("`((?:[a-z]+/)+[A-Za-z0-9_]+\\.(?:go|py|json|md|sh|toml|fits))`").FindAllStringSubmatch(guide+text(t, "README.md"), -1)
	if len(links) == 0 {
		t.Fatal("no file is named, or this test does not find it")
	}
	for _, m := range links {
		if strings.HasPrefix(m[1], "results/") || strings.HasPrefix(m[1], "references/") {
			continue // made by an example or in a survey
		}
		if _, err := os.Stat(filepath.Join("../..", m[1])); err != nil {
			t.Errorf("DEVELOPERS.md or README.md names `%s`: %v", m[1], err)
		}
	}
}
