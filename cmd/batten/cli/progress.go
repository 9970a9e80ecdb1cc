package cli

import (
	"fmt"
	"io"
	"time"

	"github.com/vbauerster/mpb/v8"
	"github.com/vbauerster/mpb/v8/decor"

	"batten/runner"
)

// progress shows how a run gets on: a bar on a terminal, plain lines
// elsewhere, nothing when quiet.
func (e *env) progress() runner.Progress {
	switch {
	case e.quiet:
		return nil
	case isTerminal(e.err):
		return &bar{w: e.err}
	default:
		return &lines{w: e.err}
	}
}

// bar draws one bar a curve.
type bar struct {
	w io.Writer
	p *mpb.Progress
	b *mpb.Bar
}

func (b *bar) Start(what string, groups int) {
	b.p = mpb.New(mpb.WithOutput(b.w), mpb.WithWidth(40), mpb.WithRefreshRate(120*time.Millisecond))
	b.b = b.p.New(int64(groups), mpb.BarStyle().Lbound("").Filler("=").Tip("=").Padding(".").Rbound(""),
		mpb.PrependDecorators(decor.Name(what+" ")),
		mpb.AppendDecorators(decor.CountersNoUnit(" %d of %d fits"), decor.OnComplete(decor.EwmaETA(decor.ET_STYLE_GO, 30, decor.WCSyncSpace), "")),
		mpb.BarRemoveOnComplete())
}

func (b *bar) Add(n int) { b.b.EwmaIncrBy(n, 100*time.Millisecond) }

func (b *bar) Stop() {
	if !b.b.Completed() {
		b.b.Abort(true)
	}
	b.p.Wait()
}

func (b *bar) Note(text string) { fmt.Fprintln(b.w, text) }

// lines writes a line where a curve begins.
type lines struct{ w io.Writer }

func (l *lines) Start(what string, groups int) {
	unit := "groups"
	if groups == 1 {
		unit = "group"
	}
	fmt.Fprintf(l.w, "fitting %s: %d %s\n", what, groups, unit)
}
func (l *lines) Add(int)          {}
func (l *lines) Stop()            {}
func (l *lines) Note(text string) { fmt.Fprintln(l.w, text) }
