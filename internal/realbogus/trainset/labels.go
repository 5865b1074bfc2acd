package trainset

import (
	"encoding/csv"
	"errors"
	"fmt"
	"io"
	"os"
	"strings"
)

// Labels holds reviewers' verdicts by candidate: true for real.
type Labels map[string]bool

// ReadLabels reads verdicts from a CSV file with the columns candidate_id and
// label, which is real or bogus. Two verdicts on one candidate that disagree are
// an error, as is a file without any.
func ReadLabels(path string) (Labels, error) {
	f, err := os.Open(path)
	if err != nil {
		return nil, err
	}
	defer f.Close()
	r := csv.NewReader(f)
	head, err := r.Read()
	if errors.Is(err, io.EOF) {
		return nil, fmt.Errorf("%s: the file is empty, expected the columns candidate_id and label", path)
	}
	if err != nil {
		return nil, fmt.Errorf("%s: %w", path, err)
	}
	id, label := -1, -1
	for k, name := range head {
		switch strings.TrimSpace(strings.TrimPrefix(name, "\ufeff")) {
		case "candidate_id":
			id = k
		case "label":
			label = k
		}
	}
	if id < 0 || label < 0 {
		return nil, fmt.Errorf("%s: line 1: found the columns %s, expected candidate_id and label", path, strings.Join(head, ", "))
	}
	list := Labels{}
	first := map[string]int{}
	for {
		row, err := r.Read()
		if errors.Is(err, io.EOF) {
			break
		}
		if err != nil {
			return nil, fmt.Errorf("%s: %w", path, err)
		}
		line, _ := r.FieldPos(0)
		key, word := strings.TrimSpace(row[id]), strings.TrimSpace(row[label])
		if key == "" {
			return nil, fmt.Errorf("%s: line %d: no candidate_id", path, line)
		}
		if word != "real" && word != "bogus" {
			return nil, fmt.Errorf("%s: line %d: found the label %q of candidate %s, expected real or bogus", path, line, word, key)
		}
		if old, ok := list[key]; ok && old != (word == "real") {
			return nil, fmt.Errorf("%s: lines %d and %d contradict each other about candidate %s: settle it, or take both lines out", path, first[key], line, key)
		}
		list[key] = word == "real"
		if first[key] == 0 {
			first[key] = line
		}
	}
	if len(list) == 0 {
		return nil, fmt.Errorf("%s: no label in it, expected lines of candidate_id and real or bogus", path)
	}
	return list, nil
}

// Add takes another verdict in. It is an error when it contradicts an earlier
// one; whose says where it comes from.
func (l Labels) Add(candidate string, real bool, whose string) error {
	if old, ok := l[candidate]; ok && old != real {
		return fmt.Errorf("%s contradicts an earlier label about candidate %s: settle it by a further label, or mark it as unsure", whose, candidate)
	}
	l[candidate] = real
	return nil
}
