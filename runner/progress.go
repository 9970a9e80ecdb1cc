package runner

// Progress is told how the run gets on. Calls come from one goroutine for
// Start, Stop and Note; Add may come from many.
type Progress interface {
	Start(what string, groups int)
	Add(groups int)
	Stop()
	Note(text string)
}

type quiet struct{}

func (quiet) Start(string, int) {}
func (quiet) Add(int)           {}
func (quiet) Stop()             {}
func (quiet) Note(string)       {}
