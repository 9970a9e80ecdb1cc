package reports

import "image/color"

// Inks of the figures. They are drawn in stand-in colours, which the files'
// writers replace: by the light values in files, by CSS variables in a page,
// so that it follows the reader's light or dark ground.
//
// Derivation: hues 75 degrees apart about the circle of OKLCH, started at 235
// (a slate blue for the fitted curve, since most of a figure's ink is its), at
// lightness 0.50 on the light ground and 0.78 on the dark one, chroma as large
// as sRGB allows at both; 235 (curve), 40 (marks: rust) and 340 (alarm: plum)
// stay apart under the usual colour-vision deficiencies, for they differ in
// lightness or along the blue-yellow axis. A test holds their contrast with
// the ground to WCAG 2.1 AA.
var inks = []struct {
	name, light, dark string
	stand             color.RGBA
}{
	{"ink", "#22262b", "#e7e9ec", color.RGBA{R: 1, G: 1, B: 1, A: 255}},
	{"soft", "#5c646d", "#a3abb4", color.RGBA{R: 2, G: 1, B: 1, A: 255}},
	{"rule", "#c9ced4", "#444b53", color.RGBA{R: 3, G: 1, B: 1, A: 255}},
	{"curve", "#1f5f8b", "#79b8e6", color.RGBA{R: 4, G: 1, B: 1, A: 255}},
	{"mark", "#a2431c", "#f0a27c", color.RGBA{R: 5, G: 1, B: 1, A: 255}},
	{"alarm", "#8c2f6b", "#e59ccb", color.RGBA{R: 6, G: 1, B: 1, A: 255}},
	{"point", "#6a7178", "#9aa2aa", color.RGBA{R: 7, G: 1, B: 1, A: 255}},
	{"band", "#d3e2ee", "#21394b", color.RGBA{R: 8, G: 1, B: 1, A: 255}},
	{"beyond", "#ebf1f5", "#1b2832", color.RGBA{R: 9, G: 1, B: 1, A: 255}},
}

// Grounds that the inks stand on.
const (
	lightGround = "#fdfdfb"
	darkGround  = "#16191d"
)

// ink returns the stand-in colour of that name.
func ink(name string) color.RGBA {
	for _, i := range inks {
		if i.name == name {
			return i.stand
		}
	}
	panic("reports: no ink " + name)
}
