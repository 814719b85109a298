package pipeline_test

import (
	"bytes"
	"encoding/json"
	"fmt"
	"math"
	"runtime"
	"strings"
	"testing"

	"platen/pipeline"
	"platen/pipeline/phantom"
	"platen/pipeline/run"
	"platen/qc"
)

// text is a short simulated run as exported.
func text(t testing.TB, s phantom.Spec) []byte {
	t.Helper()
	b, err := phantom.Text(s)
	if err != nil {
		t.Fatal(err)
	}
	return b
}

// at sets the sampling rate of a simulated run.
func at(s phantom.Spec, hz float64) phantom.Spec {
	s.Rig.RateHz = hz
	s.Rig.FlickerToHz = math.Min(s.Rig.FlickerToHz, hz/2)
	return s
}

// read analyses bytes in one piece and returns the document.
func read(t testing.TB, name string, b []byte) run.Result {
	t.Helper()
	r := pipeline.Open(name, pipeline.Defaults())
	r.Feed(b)
	how := r.Completion()
	if how == run.Growing {
		how = run.BySettling
	}
	e, id := r.Finish(how)
	return qc.Conclude(e, id, name, qc.Defaults(), run.Software{})
}

// The same run in another dialect is the same run: numbers printed alike give
// results alike.
func TestDialectsAgree(t *testing.T) {
	s := at(phantom.Ordinary(11), 200)
	s.Dialect.Ending = phantom.Silent
	want := read(t, "plain", text(t, s))
	if want.Verdict != run.Accept {
		t.Fatalf("a good run is judged %s: %v", want.Verdict, want.Findings)
	}
	for name, d := range map[string]phantom.Dialect{
		"semicolons, decimal commas, CRLF": {Delimiter: ';', DecimalComma: true, CRLF: true, Ending: phantom.Silent},
		"commas":                           {Delimiter: ',', Ending: phantom.Silent},
		"UTF-16":                           {Encoding: phantom.UTF16LittleEndian, MicroSign: true, Ending: phantom.Silent},
		"Latin-1":                          {Encoding: phantom.Latin1, MicroSign: true, Ending: phantom.Silent},
	} {
		o := s
		o.Dialect = d
		got := read(t, "plain", text(t, o))
		got.Run.ID = want.Run.ID
		a, _ := json.Marshal(want)
		b, _ := json.Marshal(got)
		if !bytes.Equal(a, b) {
			t.Errorf("%s:\n%s\nwant\n%s", name, b, a)
		}
	}
}

// Deflection and drive position carry force and height; section area carries
// the radius. Each is printed with seven digits, so the moduli agree to some
// parts in ten thousand (deflection is a small difference of positions).
func TestRawChannels(t *testing.T) {
	s := at(phantom.Ordinary(12), 200)
	want := read(t, "a", text(t, s))
	s.Dialect.Deflection, s.Dialect.SectionArea = true, true
	got := read(t, "a", text(t, s))
	for i := range want.Segments {
		a, b := want.Segments[i].StorageNPerM, got.Segments[i].StorageNPerM
		if a == nil {
			continue
		}
		if b == nil || math.Abs(b.Value/a.Value-1) > 1e-3 {
			t.Errorf("storage modulus %+v, want %+v", b, a)
		}
	}
}

// Where the cell's size comes from is always named, in the order of trust.
func TestVolumeSources(t *testing.T) {
	for _, c := range []struct {
		name   string
		change func(*phantom.Spec)
		want   run.VolumeSource
		within float64 // of the radius; declared and contact sizes carry their own errors
	}{
		{"images", func(*phantom.Spec) {}, run.VolumeImaged, 0.005},
		{"declared", func(s *phantom.Spec) { s.Rig.ImageEveryS = 0 }, run.VolumeDeclared, 0.05},
		{"contact", func(s *phantom.Spec) { s.Rig.ImageEveryS, s.Rig.DiameterUM = 0, 0 }, run.VolumeContact, 0.01},
	} {
		s := phantom.Ordinary(13)
		s.Rig = exact(s.Rig)
		c.change(&s)
		e, tr := analysed(t, s, pipeline.Defaults())
		if len(e.Volumes) == 0 || e.Volumes[0].Source != c.want {
			t.Fatalf("%s: volumes %+v", c.name, e.Volumes)
		}
		r := e.Volumes[0].RadiusM
		if d := math.Abs(r.Value/tr.RadiusM - 1); d > c.within || math.Abs(r.Value-tr.RadiusM) > 3*r.U {
			t.Errorf("%s: radius %+v, truth %g", c.name, r, tr.RadiusM)
		}
	}
}

// Several heights and several frequencies in one run.
func TestManySegments(t *testing.T) {
	s := phantom.Ordinary(14)
	s.Rig = exact(s.Rig)
	d := 2 * s.Cell.RadiusM
	s.StartM = d + 2e-6
	s.Protocol = []phantom.Move{phantom.Hold(4)}
	for _, h := range []float64{0.75, 0.65, 0.55} {
		s.Protocol = append(s.Protocol, phantom.Ramp(h*d, 1.5e-6), phantom.Hold(6))
		for _, f := range []float64{0.5, 1, 2} {
			s.Protocol = append(s.Protocol, phantom.Oscillate(f, 0.02*d, 6))
		}
		s.Protocol = append(s.Protocol, phantom.Hold(3))
	}
	s.Protocol = append(s.Protocol, phantom.Ramp(s.StartM, 2e-6), phantom.Hold(4))
	e, tr := analysed(t, s, pipeline.Defaults())
	for _, want := range oscillations(tr) {
		got := match(e, want)
		if got == nil || got.StorageNPerM == nil {
			t.Fatalf("nothing found of the oscillation at %.1f s: %+v", want.FromS, got)
		}
		// The cell still relaxes at the larger steps: 3 % or 2u.
		for _, q := range []struct {
			name  string
			q     *run.Quantity
			truth float64
		}{{"storage", got.StorageNPerM, want.StorageNPerM}, {"loss", got.LossNPerM, want.LossNPerM}, {"tension", got.TensionNPerM, want.TensionNPerM}} {
			if d := math.Abs(q.q.Value - q.truth); d > 0.03*q.truth && d > 2*q.q.U {
				t.Errorf("%.2f Hz at %.2f: %s %+v, truth %.4g", want.FrequencyHz, want.HeightRatio, q.name, *q.q, q.truth)
			}
		}
	}
}

// Sampling far above the drive is averaged before anything else; the result
// must not notice.
func TestFastSampling(t *testing.T) {
	s := at(phantom.Ordinary(15), 20000)
	s.Rig = exact(s.Rig)
	s.StartM, s.Protocol = phantom.Course(s.Cell.RadiusM, 0.6, 2, 0.0224, 6)
	e, tr := analysed(t, s, pipeline.Defaults())
	want := oscillations(tr)[0]
	got := match(e, want)
	if got == nil || got.StorageNPerM == nil || math.Abs(got.StorageNPerM.Value/want.StorageNPerM-1) > 0.01 {
		t.Errorf("got %+v, want storage %g", got, want.StorageNPerM)
	}
}

// Runs without a cell have no tension, and nothing is held against them for
// that.
func TestOtherKinds(t *testing.T) {
	s := at(phantom.Ordinary(16), 200)
	s.Cell = phantom.Cell{}
	for _, kind := range []run.Kind{run.KindBlank, run.KindGlass} {
		s.Header.Kind = kind
		r := read(t, string(kind), text(t, s))
		if r.Verdict != run.Accept || r.Cell != nil {
			t.Errorf("%s run: %s, %+v, %v", kind, r.Verdict, r.Cell, r.Findings)
		}
		// The rig's white noise of 30 pN, with a little 1/f noise, is found; the
		// Allan deviation at one sample is that of white noise.
		if kind == run.KindBlank {
			ref := r.Reference
			if ref == nil || ref.ForceNoiseN == nil || math.Abs(*ref.ForceNoiseN/30e-12-1) > 0.05 {
				t.Fatalf("blank: %+v", ref)
			}
			if a := ref.Allan[0]; math.Abs(a.TimeS-1./200) > 1e-6 || math.Abs(a.DeviationN/30e-12-1) > 0.1 {
				t.Errorf("Allan deviation %+v", a)
			}
			if ref.SteadiestS == nil || *ref.SteadiestS < 0.1 {
				t.Errorf("steadiest %+v", ref.SteadiestS)
			}
		}
	}
	s.Header.Kind = run.KindCell
	r := read(t, "no cell", text(t, s))
	if r.Verdict != run.Repeat || r.Findings[0].Rule != "no-contact" {
		t.Errorf("a cell run without a cell: %s, %v", r.Verdict, r.Findings)
	}
}

// Bad bytes end in a document that says where and what to do, never in
// silence, and never in a claim to be complete.
func TestBadBytes(t *testing.T) {
	good := text(t, at(phantom.Ordinary(17), 100))
	for name, b := range map[string][]byte{
		"empty":           nil,
		"header only":     []byte("# kind: cell\n# cell: x\n"),
		"no unit":         []byte("time\tforce [nN]\theight [um]\n0\t1\t2\n"),
		"unknown unit":    []byte("time [s]\tforce [lbf]\theight [um]\n0\t1\t2\n"),
		"text":            []byte("time [s]\tforce [nN]\theight [um]\n0\t1\t2\n0.1\toops\t2\n"),
		"no spring":       []byte("time [s]\tdeflection [nm]\theight [um]\n0\t1\t2\n0.1\t1\t2\n"),
		"NUL tail":        append(bytes.Clone(good[:len(good)/2]), make([]byte, 4096)...),
		"a line of 20 MB": []byte(strings.Repeat("7", 20<<20)),
		"a picture":       append([]byte("\x89PNG\r\n\x1a\n"), make([]byte, 1000)...),
	} {
		r := read(t, name, b)
		if r.Run.Complete || r.Verdict == run.Accept || len(r.Findings) == 0 {
			t.Errorf("%s: complete %v, %s, %v", name, r.Run.Complete, r.Verdict, r.Findings)
			continue
		}
		f := r.Findings[0]
		if f.Message == "" || f.Advice == "" {
			t.Errorf("%s: %+v says too little", name, f)
		}
		if _, err := json.Marshal(r); err != nil {
			t.Errorf("%s: %v", name, err)
		}
	}
}

// A run of any length takes the same memory.
func TestMemoryIsBounded(t *testing.T) {
	heap := func(rows int) uint64 {
		r := pipeline.Open("long", pipeline.Defaults())
		r.Feed([]byte("# diameter [um]: 19 ± 0.2\n# spring constant [N/m]: 0.2 ± 0.01\ntime [s]\tforce [nN]\theight [um]\tradius [um]\n"))
		var line []byte
		for i := range rows {
			tm := float64(i) / 1000
			line = fmt.Appendf(line[:0], "%.3f\t%.5f\t%.5f\t", tm, 20+3*math.Cos(6.3*tm), 11+0.3*math.Sin(6.3*tm))
			if i%100 == 0 {
				line = append(line, "10.9"...)
			}
			r.Feed(append(line, '\n'))
		}
		runtime.GC()
		var m runtime.MemStats
		runtime.ReadMemStats(&m)
		runtime.KeepAlive(r)
		return m.HeapAlloc
	}
	short, long := heap(200_000), heap(1_500_000)
	// 2,400 cycles more are five segments of half a megabyte each, and their
	// slices' spare capacity; the samples themselves would be 50 MB.
	if long > short+12<<20 {
		t.Errorf("%d MB after 1.5 million rows, %d MB after 0.2 million", long>>20, short>>20)
	}
}

func FuzzReading(f *testing.F) {
	good := text(f, at(phantom.Ordinary(18), 20))
	f.Add(good, uint16(100))
	f.Add(good[:len(good)/2], uint16(1))
	f.Add([]byte("time [s]\tforce [nN]\theight [um]\n0\t1\t2\n1e-3\t-1e300\t1e-300\n"), uint16(7))
	f.Add([]byte("# samples: 3\ntime [s];force [N];height [m];segment\n0;0;0;1\n0;0;0;2\n-1;0;0;1\n# end\n"), uint16(3))
	f.Fuzz(func(t *testing.T, b []byte, cut uint16) {
		if len(b) > 1<<16 {
			return // long inputs find nothing that short ones do not, slowly
		}
		whole := read(t, "fuzz", b)
		r := pipeline.Open("fuzz", pipeline.Defaults())
		for p := b; len(p) > 0; {
			n := min(len(p), int(cut)+1)
			r.Feed(p[:n])
			p = p[n:]
		}
		r.Estimates()
		how := r.Completion()
		if how == run.Growing {
			how = run.BySettling
		}
		e, id := r.Finish(how)
		parts := qc.Conclude(e, id, "fuzz", qc.Defaults(), run.Software{})
		x, err := json.Marshal(whole)
		if err != nil {
			t.Fatal(err)
		}
		y, err := json.Marshal(parts)
		if err != nil {
			t.Fatal(err)
		}
		if !bytes.Equal(x, y) {
			t.Errorf("cut in pieces of %d the document differs\n%s\n%s", cut, y, x)
		}
		if whole.Run.Complete && e.Trouble != nil {
			t.Error("damaged, but called complete")
		}
	})
}

func BenchmarkReading(b *testing.B) {
	run := text(b, at(phantom.Ordinary(19), 2000))
	rows := bytes.Count(run, []byte("\n"))
	b.SetBytes(int64(len(run)))
	b.ReportAllocs()
	for b.Loop() {
		r := pipeline.Open("bench", pipeline.Defaults())
		for p := run; len(p) > 0; {
			n := min(len(p), 256<<10)
			r.Feed(p[:n])
			p = p[n:]
		}
		r.Finish("settled")
	}
	b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N*rows), "ns/row")
}

func BenchmarkEstimates(b *testing.B) {
	r := pipeline.Open("bench", pipeline.Defaults())
	r.Feed(text(b, at(phantom.Ordinary(20), 2000)))
	b.ReportAllocs()
	for b.Loop() {
		r.Estimates()
	}
}
