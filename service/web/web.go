// Package web shows people what the stations measured: pages rendered on the server from embedded files, without any outside origin. It
// changes nothing.
package web

import (
	"embed"
	"fmt"
	"html/template"
	"io/fs"
	"net/http"
	"time"

	"example.com/admit/service/floor"
	"example.com/admit/service/inspection"
	"example.com/admit/service/verdict"
)

//go:embed files
var files embed.FS

// Source is where the latest state of the stations comes from.
type Source interface {
	Latest() []floor.State
}

// Pages serves the pages.
type Pages struct {
	source Source
	clock  inspection.Clock
	page   *template.Template
	static http.Handler
}

// New returns the pages over a source.
func New(source Source, clock inspection.Clock) (*Pages, error) {
	page, err := template.ParseFS(files, "files/*.html")
	if err != nil {
		return nil, err
	}
	below, err := fs.Sub(files, "files")
	if err != nil {
		return nil, err
	}
	return &Pages{source: source, clock: clock, page: page, static: http.FileServerFS(below)}, nil
}

// contentPolicy lets a page load nothing but its own style sheet.
const contentPolicy = "default-src 'none'; style-src 'self'; img-src 'self'; base-uri 'none'; form-action 'none'; frame-ancestors 'none'"

// ServeHTTP answers GET / with the stations and GET /style.css with the style sheet.
func (p *Pages) ServeHTTP(w http.ResponseWriter, r *http.Request) {
	h := w.Header()
	h.Set("Content-Security-Policy", contentPolicy)
	h.Set("X-Content-Type-Options", "nosniff")
	h.Set("Referrer-Policy", "no-referrer")
	if r.Method != http.MethodGet && r.Method != http.MethodHead {
		h.Set("Allow", "GET, HEAD")
		http.Error(w, "only GET is served here", http.StatusMethodNotAllowed)
		return
	}
	switch r.URL.Path {
	case "/":
		h.Set("Content-Type", "text/html; charset=utf-8")
		h.Set("Cache-Control", "no-store")
		// A failing write means that the reader is gone.
		_ = p.page.ExecuteTemplate(w, "stations.html", p.stations())
	case "/style.css":
		p.static.ServeHTTP(w, r)
	default:
		http.NotFound(w, r)
	}
}

// stationsView is what the stations page shows.
type stationsView struct {
	At    string
	Lines []lineView
}

type lineView struct {
	Name     string
	Stations []stationView
}

// stationView is one station with its last recorded verdict.
type stationView struct {
	Name, Look, Word, Mark string
	Unit, PartType         string
	When                   string
	Attempt                int
	Why, Next              []string
}

// stations builds the view, lines and stations in the order of the source.
func (p *Pages) stations() stationsView {
	now := p.clock.Now()
	v := stationsView{At: now.Format("2006-01-02 15:04:05 MST")}
	for _, s := range p.source.Latest() {
		name := s.Line
		if name == "" {
			name = "Stations without a line"
		} else {
			name = "Line " + name
		}
		if n := len(v.Lines); n == 0 || v.Lines[n-1].Name != name {
			v.Lines = append(v.Lines, lineView{Name: name})
		}
		line := &v.Lines[len(v.Lines)-1]
		line.Stations = append(line.Stations, station(s, now))
	}
	return v
}

// stale is the age at which a verdict is shown as an old one.
const stale = 10 * time.Minute

// looks are word, shape and style of each verdict: colour is never the only sign.
var looks = map[verdict.Verdict]struct{ look, word, mark string }{
	verdict.Pass:   {"pass", "PASS", "✓"},
	verdict.Fail:   {"fail", "FAIL", "✗"},
	verdict.Retest: {"retest", "RETEST", "↻"},
}

func station(s floor.State, now time.Time) stationView {
	v := stationView{Name: string(s.Name), Look: "none", Word: "no unit yet", Mark: "·"}
	r := s.Last
	if r == nil {
		return v
	}
	j := &r.Judgement
	l := looks[j.Verdict]
	v.Look, v.Word, v.Mark = l.look, l.word, l.mark
	v.Unit = r.Begin.Unit.Name()
	v.PartType = fmt.Sprintf("%s version %d", r.PartType.Name, r.PartType.Version)
	v.When = ago(now.Sub(r.RecordedAt))
	if now.Sub(r.RecordedAt) > stale {
		v.Look += " stale"
	}
	v.Attempt = r.Attempt
	v.Why, v.Next = j.Reasons(), j.Advice()
	return v
}

// ago writes an age in words; a clock that went back reads as now.
func ago(d time.Duration) string {
	switch {
	case d < 2*time.Second:
		return "just now"
	case d < 2*time.Minute:
		return fmt.Sprintf("%d s ago", int(d.Seconds()))
	case d < 2*time.Hour:
		return fmt.Sprintf("%d min ago", int(d.Minutes()))
	}
	return fmt.Sprintf("%d h ago", int(d.Hours()))
}
