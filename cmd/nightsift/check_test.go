package main

import (
	"os"
	"path/filepath"
	"strings"
	"testing"
)

func TestCheckPaintsOneFrame(t *testing.T) {
	dir := t.TempDir()
	expect(t, 0, "simulate", "plain", "--size", "256", "--seed", "5", "--out", dir)
	frame, reference, picture := filepath.Join(dir, "new-1.fits"), filepath.Join(dir, "reference.fits"), filepath.Join(dir, "a.png")
	if _, stderr := expect(t, 2, "check", frame, reference, "--picture", picture); !strings.Contains(stderr, "exactly one frame, found 2") {
		t.Errorf("stderr: %s", stderr)
	}
	if stdout, _ := expect(t, 0, "check", frame, "--picture", picture); !strings.Contains(stdout, "a.png: one pixel is 1 of the frame") {
		t.Errorf("stdout: %s", stdout)
	}
	if head, err := os.ReadFile(picture); err != nil || !strings.HasPrefix(string(head), "\x89PNG") {
		t.Errorf("no picture: %v", err)
	}
	expect(t, 1, "check", frame, "--picture", filepath.Join(dir, "absent", "a.png"))
}
