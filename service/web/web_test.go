package web

import (
	"net/http"
	"net/http/httptest"
	"strings"
	"testing"
	"time"

	"example.com/admit/service/floor"
	"example.com/admit/service/inspection"
	"example.com/admit/service/verdict"
)

type states []floor.State

func (f states) Latest() []floor.State { return f }

type fixed time.Time

func (f fixed) Now() time.Time { return time.Time(f) }

// record returns a recorded inspection with a verdict.
func record(v verdict.Verdict, at time.Time) *inspection.Record {
	r := &inspection.Record{RecordedAt: at, Attempt: 2}
	r.Begin.Unit.Serial = "TM0000123<script>"
	r.PartType.Name, r.PartType.Version = "TM-25M000-F10", 1
	r.Judgement.Verdict = v
	if v == verdict.Retest {
		r.Judgement.RetestCauses = []verdict.RetestCause{verdict.NewCause(verdict.TooNoisy, "Signal 3 dB above the noise.")}
	}
	return r
}

// TestStationsPage: every verdict has its word and shape, reasons and advice are there, and what a fixture sent cannot become markup.
func TestStationsPage(t *testing.T) {
	now := time.Date(2026, 11, 30, 9, 0, 0, 0, time.UTC)
	state := func(name, line string, r *inspection.Record) floor.State {
		return floor.State{Station: inspection.Station{Name: inspection.StationID(name), Line: line}, Last: r}
	}
	pages, err := New(states{
		state("N1", "North", record(verdict.Pass, now.Add(-time.Minute))), state("N2", "North", record(verdict.Fail, now)),
		state("S1", "South", record(verdict.Retest, now.Add(time.Hour))), state("S2", "South", nil),
	}, fixed(now))
	if err != nil {
		t.Fatal(err)
	}
	w := httptest.NewRecorder()
	pages.ServeHTTP(w, httptest.NewRequest(http.MethodGet, "/", nil))
	body := w.Body.String()
	for _, want := range []string{"Line North", "Line South", "✓", "PASS", "✗", "FAIL", "↻", "RETEST", "no unit yet", "60 s ago", "just now", "too_noisy", "Set the unit aside as failed.", "Clean the contacts", "TM0000123&lt;script&gt;", "k = 2"} {
		if !strings.Contains(body, want) {
			t.Errorf("%q is missing", want)
		}
	}
	if strings.Contains(body, "TM0000123<script>") || strings.Contains(body, "http://") || strings.Contains(body, "https://") {
		t.Error("markup from a fixture, or an outside origin")
	}
	if p := w.Header().Get("Content-Security-Policy"); !strings.Contains(p, "default-src 'none'") {
		t.Errorf("content policy %q", p)
	}
}

// TestOnlyGet: nothing is changed by a page, and what is not there is not found.
func TestOnlyGet(t *testing.T) {
	pages, err := New(states{}, fixed(time.Time{}))
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		method, path string
		want         int
	}{{"GET", "/", 200}, {"GET", "/style.css", 200}, {"POST", "/", 405}, {"DELETE", "/style.css", 405}, {"GET", "/stations.html", 404}, {"GET", "/../web.go", 404}} {
		w := httptest.NewRecorder()
		r := httptest.NewRequest(c.method, "/", nil)
		r.URL.Path = c.path
		pages.ServeHTTP(w, r)
		if w.Code != c.want {
			t.Errorf("%s %s: %d, want %d", c.method, c.path, w.Code, c.want)
		}
	}
}
