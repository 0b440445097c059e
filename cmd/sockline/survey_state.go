package main

import (
	"bufio"
	"bytes"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"path/filepath"

	"sockline/alerting/survey"
)

// A survey keeps what it has played in a file of JSON Lines: a head that says
// of what, then a record a line. Interrupted, it goes on from there; a last
// line that was cut off is played again.

// surveyHead is the first line.
type surveyHead struct {
	State   int         `json:"survey_state"` // version of the format
	Version string      `json:"version"`      // of the program: another one may judge otherwise
	Config  string      `json:"config_sha256"`
	Plan    survey.Plan `json:"plan"`
}

// stateFile is where network i of the survey keeps what it has played; empty
// where nothing is kept.
func (o *surveyOptions) stateFile(i int) string {
	switch {
	case o.dir != "":
		return filepath.Join(o.dir, fmt.Sprintf("survey-%d.state.jsonl", i+1))
	case o.report != "":
		return fmt.Sprintf("%s-%d.state.jsonl", o.report, i+1)
	}
	return ""
}

// clearState takes the state of a finished survey away, except from a directory
// that is the survey's own: there its records may be of use.
func (o *surveyOptions) clearState(all []*surveyed) error {
	if o.report == "" || o.plan.Episodes == 0 {
		return nil
	}
	for _, s := range all {
		if err := os.Remove(s.state); err != nil {
			return fmt.Errorf("take away the state of the finished survey: %w", err)
		}
	}
	return nil
}

// surveyState is an open file of what has been played.
type surveyState struct {
	file  *os.File // nil: nothing is kept
	out   *bufio.Writer
	found []survey.Record
}

// openSurveyState reads what an earlier run has played, and goes on behind it.
func openSurveyState(s *surveyed, plan survey.Plan) (*surveyState, error) {
	if s.state == "" {
		return &surveyState{}, nil
	}
	source, err := os.ReadFile(s.path)
	if err != nil {
		return nil, fmt.Errorf("read the configuration: %w", err)
	}
	sum := sha256.Sum256(source)
	head := surveyHead{State: 1, Version: version, Config: hex.EncodeToString(sum[:]), Plan: plan}
	f, err := os.OpenFile(s.state, os.O_RDWR|os.O_CREATE, 0o644)
	if err != nil {
		return nil, fmt.Errorf("open the state of the survey: %w", err)
	}
	state := &surveyState{file: f}
	end, err := state.read(head, plan.Tasks(s.network))
	if err == nil {
		err = f.Truncate(end)
	}
	if err == nil {
		_, err = f.Seek(end, 0)
	}
	if err != nil {
		return nil, errors.Join(fmt.Errorf("the state of the survey in %s: %w", s.state, err), f.Close())
	}
	state.out = bufio.NewWriter(f)
	if end == 0 {
		return state, state.line(head)
	}
	return state, nil
}

// mostRecord is the longest line that is read, bytes.
const mostRecord = 1 << 20

// read takes the whole lines and gives where they end.
func (s *surveyState) read(head surveyHead, tasks int) (end int64, err error) {
	lines := bufio.NewScanner(s.file)
	lines.Buffer(nil, mostRecord)
	lines.Split(wholeLines)
	seen := make([]bool, tasks)
	for n := 1; lines.Scan(); n++ {
		line := lines.Bytes()
		if n == 1 {
			var was surveyHead
			if err := json.Unmarshal(line, &was); err != nil || was.State == 0 {
				return 0, errors.New("is of something else: choose another name for the report")
			}
			if was != head {
				return 0, errors.New("belongs to another plan, configuration or version of the program: remove it to begin anew, or choose another place for the report")
			}
		} else {
			var r survey.Record
			if err := json.Unmarshal(line, &r); err != nil {
				return 0, fmt.Errorf("line %d: %w; remove the file to begin anew", n, err)
			}
			if i := r.Index(); i < 0 || i >= tasks || seen[i] {
				return 0, fmt.Errorf("line %d: there is no task %d left; remove the file to begin anew", n, i)
			}
			seen[r.Index()] = true
			s.found = append(s.found, r)
		}
		end += int64(len(line)) + 1
	}
	return end, lines.Err()
}

// wholeLines splits at line ends and leaves out a last line without one: it
// was cut off.
func wholeLines(data []byte, _ bool) (advance int, token []byte, err error) {
	if i := bytes.IndexByte(data, '\n'); i >= 0 {
		return i + 1, data[:i], nil
	}
	return 0, nil, nil
}

// add keeps a record.
func (s *surveyState) add(r survey.Record) error {
	if s.file == nil {
		return nil
	}
	return s.line(r)
}

// line appends one line and hands it to the system at once: a process that is
// killed loses none.
func (s *surveyState) line(v any) error {
	b, err := json.Marshal(v)
	if err == nil {
		_, err = s.out.Write(append(b, '\n'))
	}
	if err = errors.Join(err, s.out.Flush()); err != nil {
		return fmt.Errorf("keep what the survey has played: %w", err)
	}
	return nil
}

func (s *surveyState) close() error {
	if s.file == nil {
		return nil
	}
	return s.file.Close()
}
