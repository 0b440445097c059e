package main

import (
	"context"
	"errors"
	"flag"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"runtime"
	"strings"
	"time"

	"sockline/alerting/survey"
	"sockline/config"
	"sockline/sensors/synthetic"
)

func surveyCommand() command {
	return command{
		name: "survey", summary: "study what the masts of a configuration can see, and where more of them should stand",
		setup: func(fs *flag.FlagSet) action {
			o := surveyOptions{}
			cfg := configFlag(fs)
			fs.IntVar(&o.plan.Episodes, "episodes", 2000, "`NUMBER` of drawn episodes of 20 minutes; with 0 only what follows at once from where the masts stand")
			fs.Uint64Var(&o.plan.Seed, "seed", survey.ReportingSeed, "`NUMBER` of the first episode; those from 5000000 to 5999999 were not tuned on; of others the report says so")
			fs.IntVar(&o.jobs, "jobs", runtime.GOMAXPROCS(0), "`NUMBER` of episodes played at a time; the result does not depend on it")
			fs.Float64Var(&o.plan.GroundStep, "ground-step", 500, "distance in `METRES` of the places tried for blind ground, 100 to 2000; 0 to leave that out")
			fs.StringVar((*string)(&o.plan.Profile), "profile", "", "`NAME` of what an outflow leaves at mast height: oseguera-bowles, vicroy or wall-jet; a spread between them unless given")
			fs.BoolVar(&o.plan.Windy, "windy", false, "windy weather alone, to find out how often alerts open falsely")
			fs.StringVar(&o.compare, "compare", "", "configuration `FILE` of another network for the same runways, to meet the same weather")
			fs.StringVar(&o.dir, "out", "", "`DIRECTORY` for survey.html, survey.json and what an interrupted survey goes on from")
			fs.StringVar(&o.report, "report", "", "`FILE` for the report as one HTML page; an interrupted survey goes on from what lies beside it")
			fs.StringVar(&o.sites, "sites", "", "`FILE` of where masts may stand, for --next: GeoJSON polygons and points, or lines \"latitude longitude name\"")
			fs.IntVar(&o.next, "next", 0, "`NUMBER` of masts to find the best places for, 1 to 6")
			fs.Float64Var(&o.accept, "accept", 0.5, "`NUMBER` of false openings in 100 path-hours that is put up with, for the choice of levels")
			out := outputFlag(fs)
			return func(ctx context.Context, p *program, _ []string) error {
				o.nextGiven = given(fs, "next")
				o.json = out.json()
				return runSurvey(ctx, p, *cfg, o)
			}
		},
	}
}

// surveyOptions is what the command line asked for.
type surveyOptions struct {
	plan                        survey.Plan
	jobs, next                  int
	nextGiven, json             bool
	compare, dir, report, sites string
	accept                      float64
}

// check names a wrong use.
func (o *surveyOptions) check() error {
	switch {
	case o.plan.Episodes < 0:
		return usagef("--episodes %d: give a number of episodes, or 0 for none", o.plan.Episodes)
	case o.jobs < 1 || o.jobs > 1024:
		return usagef("--jobs %d: give from 1 to 1024", o.jobs)
	case o.nextGiven && (o.next < 1 || o.next > survey.MostSites):
		return usagef("--next %d: give from 1 to %d", o.next, survey.MostSites)
	case o.sites != "" && o.next == 0:
		return usagef("--sites says where masts may stand: add --next NUMBER of masts to find places for")
	case o.plan.Windy && o.compare != "":
		return usagef("--windy finds false openings alone, and --compare compares what is found: leave one out")
	case o.dir != "" && o.report != "":
		return usagef("give either --out DIRECTORY or --report FILE")
	case !(o.accept >= 0 && o.accept <= 1000):
		return usagef("--accept %g: give a number of false openings in 100 path-hours, from 0 to 1000", o.accept)
	}
	switch o.plan.Profile {
	case "", synthetic.ProfileOsegueraBowles, synthetic.ProfileVicroy, synthetic.ProfileWallJet:
	default:
		return usagef("--profile %q: choose %s, %s or %s", o.plan.Profile, synthetic.ProfileOsegueraBowles, synthetic.ProfileVicroy, synthetic.ProfileWallJet)
	}
	if o.plan.Episodes == 0 || o.plan.Windy {
		o.plan.GroundStep = 0
	}
	return nil
}

// surveyed is one network on its way through a survey.
type surveyed struct {
	network *survey.Network
	path    string
	state   string // file; empty for none
	records []survey.Record
}

// runSurvey does the whole survey and reports it.
func runSurvey(ctx context.Context, p *program, path string, o surveyOptions) error {
	if err := o.check(); err != nil {
		return err
	}
	var all []*surveyed
	for i, name := range []string{path, o.compare} {
		if i == 1 && name == "" {
			break
		}
		cfg, err := loadConfig(name)
		if err != nil {
			return err
		}
		n, err := networkOf(cfg)
		if err != nil {
			return err
		}
		all = append(all, &surveyed{network: n, path: name, state: o.stateFile(i)})
	}
	if len(all) == 2 {
		all[0].network.Name += " (" + filepath.Base(path) + ")"
		all[1].network.Name += " (" + filepath.Base(o.compare) + ")"
		if err := survey.Comparable(all[0].network, all[1].network); err != nil {
			return err
		}
	}
	report, err := o.begin(p, all)
	if err != nil {
		return err
	}
	var stopped error
	if o.plan.Episodes > 0 {
		if o.dir != "" {
			if err := os.MkdirAll(o.dir, 0o755); err != nil {
				return fmt.Errorf("make the directory of the survey: %w", err)
			}
		}
		for _, s := range all {
			if stopped = s.play(ctx, p, o); stopped != nil && !errors.Is(stopped, context.Canceled) {
				return stopped
			}
		}
		for i, s := range all {
			report.Results[i].Findings = survey.Tally(s.network, o.plan, s.records, o.accept)
		}
		if len(all) == 2 {
			c := survey.Compare(all[0].network, all[1].network, o.plan, all[0].records, all[1].records)
			report.Comparison = &c
		}
	}
	report.Finish()
	if err := o.write(p, report); err != nil {
		return err
	}
	if stopped != nil {
		return o.interrupted(all)
	}
	return o.clearState(all)
}

// begin is the report with what needs no episode.
func (o *surveyOptions) begin(p *program, all []*surveyed) (*survey.Report, error) {
	report := &survey.Report{
		Made: p.now().UTC().Format(time.DateOnly), Version: version, Command: o.words(all), Accepted: o.accept,
	}
	for i, s := range all {
		if o.plan.Episodes > 0 {
			if err := o.plan.Check(s.network); err != nil {
				return nil, err
			}
		}
		var candidates []survey.Candidate
		next := 0
		if i == 0 && o.next > 0 {
			var err error
			if candidates, err = candidatesFor(s.network, o.sites); err != nil {
				return nil, err
			}
			next = o.next
		}
		d, err := survey.DesignOf(s.network, candidates, next)
		if err != nil {
			return nil, err
		}
		report.Results = append(report.Results, survey.Result{Layout: survey.LayoutOf(s.network), Design: d})
	}
	return report, nil
}

// words is the command that makes this report again.
func (o *surveyOptions) words(all []*surveyed) string {
	words := []string{"sockline survey --config " + all[0].path}
	if len(all) == 2 {
		words = append(words, "--compare "+all[1].path)
	}
	words = append(words, fmt.Sprintf("--episodes %d --seed %d --ground-step %g", o.plan.Episodes, o.plan.Seed, o.plan.GroundStep))
	if o.plan.Windy {
		words = append(words, "--windy")
	}
	if o.plan.Profile != "" {
		words = append(words, "--profile "+string(o.plan.Profile))
	}
	if o.next > 0 {
		words = append(words, fmt.Sprintf("--next %d", o.next))
	}
	if o.sites != "" {
		words = append(words, "--sites "+o.sites)
	}
	return strings.Join(append(words, fmt.Sprintf("--accept %g", o.accept)), " ")
}

// networkOf is the masts of a configuration as a survey needs them.
func networkOf(cfg *config.Config) (*survey.Network, error) {
	specs, err := stationSpecs(cfg, synthetic.StudyStart.Time())
	if err != nil {
		return nil, err
	}
	return &survey.Network{Name: cfg.Airfield.Name, Settings: engineSettings(cfg, true), Specs: specs}, nil
}

// play plays what is left of the survey over one network.
func (s *surveyed) play(ctx context.Context, p *program, o surveyOptions) error {
	state, err := openSurveyState(s, o.plan)
	if err != nil {
		return err
	}
	done := make([]bool, o.plan.Tasks(s.network))
	for _, r := range state.found {
		done[r.Index()] = true
	}
	s.records = state.found
	if n := len(s.records); n > 0 && n < len(done) {
		fmt.Fprintf(p.stderr, "%s: going on after %d of %d tasks\n", s.network.Name, n, len(done))
	}
	bar := newProgress(p, s.network.Name).withLeft()
	before := len(s.records)
	err = survey.Run(ctx, s.network, o.plan, o.jobs, func(i int) bool { return done[i] }, func(r survey.Record) error {
		s.records = append(s.records, r)
		bar.draw(func() float64 { return float64(len(s.records)-before) / float64(len(done)-before) })
		return state.add(r)
	})
	bar.end()
	return errors.Join(err, state.close())
}

// interrupted says what was kept.
func (o *surveyOptions) interrupted(all []*surveyed) error {
	done, of := 0, 0
	for _, s := range all {
		done, of = done+len(s.records), of+o.plan.Tasks(s.network)
	}
	rest := "give --out or --report next time to be able to go on"
	if all[0].state != "" {
		rest = "the same command goes on from there"
	}
	return fmt.Errorf("interrupted after %d of %d tasks; the report of these is marked as partial; %s", done, of, rest)
}

// write prints the report and puts it into files.
func (o *surveyOptions) write(p *program, r *survey.Report) error {
	html := o.report
	if o.dir != "" {
		if err := os.MkdirAll(o.dir, 0o755); err != nil {
			return fmt.Errorf("make the directory of the survey: %w", err)
		}
		html = filepath.Join(o.dir, "survey.html")
		if err := replaceFile(filepath.Join(o.dir, "survey.json"), r.WriteJSON); err != nil {
			return err
		}
	}
	if html != "" {
		if err := replaceFile(html, r.WriteHTML); err != nil {
			return err
		}
		fmt.Fprintf(p.stderr, "the report is in %s\n", html)
	}
	if o.json {
		return r.WriteJSON(p.stdout)
	}
	return r.WriteText(p.stdout)
}

// replaceFile writes a file beside its place and moves it there, so that no
// half-written report is ever found.
func replaceFile(path string, write func(io.Writer) error) (err error) {
	f, err := os.CreateTemp(filepath.Dir(path), filepath.Base(path)+".*")
	if err != nil {
		return fmt.Errorf("write %s: %w", path, err)
	}
	defer func() {
		if err != nil {
			err = errors.Join(fmt.Errorf("write %s: %w", path, err), os.Remove(f.Name()))
		}
	}()
	if err = errors.Join(write(f), f.Chmod(0o644), f.Sync(), f.Close()); err != nil {
		return err
	}
	return os.Rename(f.Name(), path)
}
