package main

// draw is a stream of random numbers: SplitMix64 (Steele, Lea and Flood 2014,
// OOPSLA, "Fast splittable pseudorandom number generators"), kept here so that
// the data stay the same bytes whatever the standard library does.
type draw struct{ state uint64 }

func (d *draw) next() uint64 {
	d.state += 0x9e3779b97f4a7c15
	z := d.state
	z = (z ^ z>>30) * 0xbf58476d1ce4e5b9
	z = (z ^ z>>27) * 0x94d049bb133111eb
	return z ^ z>>31
}

// uniform is in [0, 1).
func (d *draw) uniform() float64 { return float64(d.next()>>11) / (1 << 53) }

// below is a whole number from 0 to n-1.
func (d *draw) below(n int) int { return int(d.next() % uint64(n)) }

// normal is nearly standard normal: the sum of twelve uniforms less six, which
// has mean 0 and variance 1 and needs no function whose last bit could differ
// between machines.
func (d *draw) normal() float64 {
	s := -6.0
	for range 12 {
		s += d.uniform()
	}
	return s
}
