package spline

import (
	"fmt"
	"testing"
)

func BenchmarkOrder(b *testing.B) {
	for _, n := range []int{50, 200, 2000, 100000} {
		d := benchData(b, n)
		var w1 memory1
		var w3 memory3
		var w2 Workspace
		run := func(name string, f func()) {
			b.Run(fmt.Sprintf("%s/n=%d", name, n), func(b *testing.B) {
				b.ReportAllocs()
				f()
				for b.Loop() {
					f()
				}
				b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/float64(n), "ns/point")
			})
		}
		for _, reml := range []bool{false, true} {
			d.haveREML = true // the constant is formed once a Data
			run(fmt.Sprintf("order=1/reml=%v", reml), func() { evaluate1(&w1, d, 0.3, reml) })
			run(fmt.Sprintf("order=2/reml=%v", reml), func() { w2.evaluate(d, 0.3, reml) })
			run(fmt.Sprintf("order=3/reml=%v", reml), func() { evaluate3(&w3, d, 0.3, reml) })
		}
	}
}
