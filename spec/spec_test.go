package spec

import "testing"

func TestDesignExample(t *testing.T) {
	s, err := Load("testdata/pears.hcl")
	if err != nil {
		t.Fatal(err)
	}
	if len(s.Curves) != 1 || len(s.Curves[0].Readings) != 5 {
		t.Errorf("%+v", s.Curves)
	}
}
