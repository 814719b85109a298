package pipeline_test

import (
	"bytes"
	"fmt"
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"platen/pipeline/run"
)

// A thermal run as exported gives the spring constant. The record is that of an
// overdamped-to-ringing resonance made by a two-pole filter of white noise
// whose mean square is scaled to kT/k exactly, so that the value does not rest
// on the analysis' own formulas.
func TestThermalRun(t *testing.T) {
	const k, temperature, rate, seconds = 0.15, 300.0, 20000.0, 10
	rng := rand.New(rand.NewPCG(4, 4))
	// Poles of a resonance at 2 kHz with Q = 4.
	w, g := 2*math.Pi*2000/rate, 2*math.Pi*2000/rate/8
	a1, a2 := 2*math.Exp(-g)*math.Cos(math.Sqrt(w*w-g*g)), -math.Exp(-2*g)
	x := make([]float64, int(rate*seconds))
	var p1, p2, sum float64
	for i := -2000; i < len(x); i++ {
		v := a1*p1 + a2*p2 + rng.NormFloat64()
		p2, p1 = p1, v
		if i >= 0 {
			x[i] = v
			sum += v * v / float64(len(x))
		}
	}
	scale := math.Sqrt(0.8174 * 1.380649e-23 * temperature / k / sum)
	var b bytes.Buffer
	b.WriteString("# kind: thermal\n# temperature [K]: 300 ± 1\n# sensitivity [nm/V]: 80 ± 0.4\ntime [s]\tdeflection [V]\n")
	for i, v := range x {
		fmt.Fprintf(&b, "%.5f\t%.6e\n", float64(i)/rate, v*scale/80e-9)
	}
	r := read(t, "thermal", b.Bytes())
	ref := r.Reference
	if ref == nil || ref.SpringConstantNPerM == nil {
		t.Fatalf("%+v %v", ref, r.Findings)
	}
	q := ref.SpringConstantNPerM
	// The filter is not quite an oscillator in continuous time; its power is
	// exact. 3 %, as promised for a record of 10 s.
	if math.Abs(q.Value/k-1) > 0.03 || q.U < 0.01*k*0.9 || q.U > 0.03*k {
		t.Errorf("spring constant %+v, truth %g", *q, k)
	}
	if math.Abs(ref.ResonanceHz.Value/2000-1) > 0.02 {
		t.Errorf("resonance %+v", *ref.ResonanceHz)
	}
	if r.Verdict == run.Repeat {
		t.Errorf("%s %v", r.Verdict, r.Findings)
	}

	short := b.Bytes()[:20000]
	short = short[:bytes.LastIndexByte(short, '\n')+1]
	r = read(t, "short", short)
	if r.Verdict != run.Repeat || r.Findings[0].Rule != "thermal-fit" || !strings.Contains(r.Findings[0].Message, "record longer") {
		t.Errorf("a short record: %s %v", r.Verdict, r.Findings)
	}
}
