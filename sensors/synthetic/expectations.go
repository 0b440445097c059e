package synthetic

// expect reads one expectation. The words for kinds, levels and states are
// closed lists: a misspelt one would make "no alert" hold for ever.
func (l *line) expect(s *Scene) {
	e := Expectation{Line: l.number, Span: wholeScene()}
	what := l.oneOf("an expectation", "alert", "no", "quiet", "closed", "unseen",
		"not-observed", "below-limits", "raised", "unobserved", "missing")
	pathNeeded := true
	switch what {
	case "alert":
		e.Kind = ExpectAlert
		e.AlertKind = l.alertKind()
	case "no":
		l.literal("alert")
		e.Kind, pathNeeded = ExpectNoAlert, false
		if l.kindFollows() {
			e.AlertKind = l.alertKind()
		}
	case "quiet":
		e.Kind, pathNeeded = ExpectNoAlert, false
	case "closed":
		e.Kind = ExpectClosed
		e.AlertKind = l.alertKind()
	case "unseen":
		e.Kind = ExpectUnseen
		e.AlertKind = l.alertKind()
	case "not-observed", "below-limits", "raised":
		e.Kind, e.State = ExpectState, what
	case "unobserved":
		e.Kind = ExpectUnobserved
		e.FromM = l.length("the begin of the ground", -maxDistance, maxDistance)
		l.literal("to")
		e.ToM = l.length("the end of the ground", -maxDistance, maxDistance)
		e.FromM, e.ToM = max(e.FromM, e.ToM), min(e.FromM, e.ToM)
	case "missing":
		e.Kind = ExpectMissing
		if len(l.words) > 0 {
			e.Mast = l.words[0]
		}
		l.station()
	}
	l.expectOptions(&e, pathNeeded)
	s.Expectations = append(s.Expectations, e)
}

// kindFollows says whether the next word of "no alert" is a kind of alert and
// not the begin of an option.
func (l *line) kindFollows() bool {
	if len(l.words) == 0 {
		return false
	}
	switch l.words[0] {
	case "on", "level", "by", "at", "from", "between":
		return false
	}
	return true
}

func (l *line) alertKind() string {
	return l.oneOf("a kind of alert", "headwind-loss", "headwind-gain", "wind-shift", "vertical-shear", "crosswind", "tailwind")
}

// expectOptions reads the path, level, reason and time of an expectation.
func (l *line) expectOptions(e *Expectation, pathNeeded bool) {
	timed := false
	when := func(read func() Span) func() {
		return func() {
			if timed {
				l.fail("it has two times")
			}
			timed = true
			e.Span = read()
		}
	}
	options := map[string]func(){
		"on": func() {
			e.Operation = l.oneOf("an operation", "landing", "take-off")
			e.Runway = l.word("the designator of a runway end")
			if l.err != nil {
				return
			}
			if _, _, err := l.geometry.Along(e.Runway, 0, 0); err != nil {
				l.fail("the path %s %s: %w", e.Operation, e.Runway, err)
			}
		},
		"by":   when(func() Span { return l.span(0, l.seconds()) }),
		"from": when(func() Span { return Span{From: l.seconds(), To: wholeScene().To} }),
		"at": when(func() Span {
			t := l.seconds()
			return Span{From: t, To: t + 1}
		}),
		"between": when(func() Span {
			from := l.seconds()
			l.literal("and")
			return l.span(from, l.seconds())
		}),
	}
	if e.Kind == ExpectAlert || e.Kind == ExpectNoAlert {
		options["level"] = func() { e.Level = l.oneOf("a level", "noticeable", "large", "beyond-margin") }
	}
	if e.Kind == ExpectClosed {
		options["because"] = func() {
			e.Because = l.oneOf("a reason", "below-level", "not-observed", "path-withdrawn", "expired-while-down")
		}
	}
	if pathNeeded {
		l.options(options, "on")
		return
	}
	l.options(options)
}
