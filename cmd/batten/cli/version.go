package cli

import "runtime/debug"

// release is the program's version; a tag of the repository bears the same.
const release = "0.1.0"

// version names program, version and, where the build knows it, commit.
func version() string {
	v := "batten " + release
	info, ok := debug.ReadBuildInfo()
	if !ok {
		return v
	}
	commit, dirty := "", false
	for _, s := range info.Settings {
		switch s.Key {
		case "vcs.revision":
			commit = s.Value
		case "vcs.modified":
			dirty = s.Value == "true"
		}
	}
	if commit == "" {
		return v
	}
	v += " (" + commit[:min(12, len(commit))]
	if dirty {
		v += ", modified"
	}
	return v + ")"
}
