// Package cell gathers the runs of one cell: the frequency series at each
// height, the height series at each frequency, and what further run would help
// most.
//
// Start with Gather. It works from result documents alone, so a cell's document
// is a pure function of its runs' documents, the settings and the version, and
// can be made again at any time. Runs to be repeated are not used, and said to
// be left out.
//
// A segment counts with the part of its uncertainty that scatters; what is
// common to all segments (force scale, cell size) goes where it belongs: into
// the moduli's own uncertainty, and into the common scale of the heights.
package cell

import (
	"cmp"
	"fmt"
	"math"
	"slices"
	"strings"

	"platen/pipeline/cortex"
	"platen/pipeline/run"
	"platen/pipeline/visco"
)

// Settings are the choices of Gather.
type Settings struct {
	// Plates is "frictionless" (default: the cell slides on coated plates) or
	// "stuck". The other case is computed beside it for comparison.
	Plates string `toml:"plates"`
	// Bootstrap is the number of series drawn for intervals. Default 400.
	Bootstrap int `toml:"bootstrap"`
	// PoissonTargetU is the standard uncertainty of the Poisson ratio at
	// which enough is enough. Default 0.08: cortices differ by more.
	PoissonTargetU float64 `toml:"poisson_target_u"`
	// LowestRatio and HighestRatio bound the heights, over the diameter, that
	// are advised. Defaults 0.5 and 0.9: flatter hurts cells, and near the
	// round shape the area hardly changes with height.
	LowestRatio  float64 `toml:"lowest_height_ratio"`
	HighestRatio float64 `toml:"highest_height_ratio"`
}

// Defaults returns the settings in force where the user gives none.
func Defaults() Settings {
	return Settings{Plates: "frictionless", Bootstrap: 400, PoissonTargetU: 0.08, LowestRatio: 0.5, HighestRatio: 0.9}
}

// Validate reports the first setting that makes no sense.
func (s Settings) Validate() error {
	switch {
	case s.Plates != "frictionless" && s.Plates != "stuck":
		return fmt.Errorf("cells.plates = %q: must be \"frictionless\" or \"stuck\"", s.Plates)
	case s.Bootstrap < 50 || s.Bootstrap > 10000:
		return fmt.Errorf("cells.bootstrap = %d: must lie between 50 and 10000", s.Bootstrap)
	case !(s.PoissonTargetU > 0 && s.PoissonTargetU < 1):
		return fmt.Errorf("cells.poisson_target_u = %g: must lie between 0 and 1", s.PoissonTargetU)
	case !(s.LowestRatio >= 0.3 && s.LowestRatio < s.HighestRatio && s.HighestRatio <= 0.95):
		return fmt.Errorf("cells.lowest_height_ratio = %g, highest_height_ratio = %g: must be 0.3 to 0.95, the lowest first", s.LowestRatio, s.HighestRatio)
	}
	return nil
}

// Tables holds the mechanics of the sheet, solved once in a process.
type Tables struct{ free, stuck *cortex.Table }

// NewTables solves the mechanics of the sheet; it takes about a fifth of a
// second. The result may be shared.
func NewTables() (*Tables, error) {
	free, err := cortex.NewTable(cortex.Options{Plates: cortex.Frictionless})
	if err != nil {
		return nil, err
	}
	stuck, err := cortex.NewTable(cortex.Options{Plates: cortex.Stuck})
	if err != nil {
		return nil, err
	}
	return &Tables{free, stuck}, nil
}

// Two segments are at the same height, or frequency, where these differ by
// less than a share that the analysis itself does not resolve.
const (
	sameRatio     = 0.015
	sameFrequency = 0.05
)

// piece is one oscillation of the cell.
type piece struct {
	run       string
	index     int
	ratio     float64
	frequency float64
	k         complex128
	uStorage  float64
	uLoss     float64
	tension   run.Quantity
	uTension  float64 // scatter only
	force     float64 // relative uncertainty of the force scale
	// what does not scatter of the moduli's uncertainties
	commonStorage, commonLoss float64
	radius                    run.Quantity
}

// Gather makes the document of a cell from those of its runs, which must all
// be of one cell of one session. It returns nil where no run is of a cell with
// a label.
func (t *Tables) Gather(runs []run.Result, s Settings, sw run.Software) *run.CellResult {
	runs = slices.Clone(runs)
	slices.SortStableFunc(runs, func(a, b run.Result) int {
		return cmp.Or(cmp.Compare(a.Run.Started, b.Run.Started), cmp.Compare(a.Run.ID, b.Run.ID))
	})
	c := &run.CellResult{Schema: run.CellSchema, Runs: []string{}, Moduli: []run.SheetModuli{},
		Effective: []run.EffectiveModulus{}, FrequencyModels: []run.FrequencySerie{}, Findings: []run.Finding{}, Software: sw}
	var pieces []piece
	for _, r := range runs {
		if r.Run.Kind != run.KindCell || r.Run.Cell == "" {
			continue
		}
		c.Cell, c.Session = r.Run.Cell, r.Run.Session
		if c.Condition == "" {
			c.Condition = r.Run.Condition
		}
		if r.Verdict == run.Repeat {
			c.LeftOut = append(c.LeftOut, r.Run.ID)
			continue
		}
		if len(c.Runs) == 0 {
			c.StartedAt = r.Run.Started
		}
		c.Runs = append(c.Runs, r.Run.ID)
		pieces = append(pieces, piecesOf(r)...)
		for _, seg := range r.Segments {
			if seg.Relaxation != nil && seg.HeightRatio != nil {
				c.Relaxation = append(c.Relaxation, run.Relaxation{Run: r.Run.ID, Segment: seg.Index, HeightRatio: seg.HeightRatio.Value, Decay: *seg.Relaxation})
			}
		}
	}
	if c.Cell == "" {
		return nil
	}
	if len(pieces) == 0 {
		c.Advice = "No modulus yet: record an oscillation at about 0.6 of the diameter."
		return c
	}
	t.size(c, pieces)
	effective(c, pieces)
	t.frequencies(c, pieces, s)
	moduli := t.heights(c, pieces, s)
	c.Advice, c.Enough = advise(c, pieces, moduli, s)
	return c
}

func piecesOf(r run.Result) []piece {
	var out []piece
	if r.Cell == nil || r.Cell.SphereRadiusM == nil {
		return nil
	}
	force := 0.0
	if k := r.Calibration.SpringConstantNPerM; k != nil && k.Value > 0 {
		force = k.U / k.Value
	}
	for _, s := range r.Segments {
		if s.StorageNPerM == nil || s.LossNPerM == nil || s.StorageScatter == nil || s.LossScatter == nil ||
			s.FrequencyHz == nil || s.HeightRatio == nil || s.TensionNPerM == nil || s.TensionScatter == nil {
			continue
		}
		if !(*s.StorageScatter > 0) || !(*s.LossScatter > 0) || !(s.TensionNPerM.Value > 0) {
			continue
		}
		out = append(out, piece{
			run: r.Run.ID, index: s.Index, ratio: s.HeightRatio.Value, frequency: s.FrequencyHz.Value,
			k:        complex(s.StorageNPerM.Value, s.LossNPerM.Value),
			uStorage: *s.StorageScatter, uLoss: *s.LossScatter,
			tension: *s.TensionNPerM, uTension: *s.TensionScatter,
			force: force, radius: *r.Cell.SphereRadiusM,
			commonStorage: common(s.StorageNPerM.U, *s.StorageScatter), commonLoss: common(s.LossNPerM.U, *s.LossScatter),
		})
	}
	return out
}

func common(all, scatter float64) float64 {
	return math.Sqrt(math.Max(0, all*all-scatter*scatter))
}

// size reports radius and tension: the tension at the lowest height, where the
// scale of the heights matters least.
func (t *Tables) size(c *run.CellResult, ps []piece) {
	low := slices.MinFunc(ps, func(a, b piece) int { return cmp.Compare(a.ratio, b.ratio) })
	c.TensionNPerM = run.Known(low.tension.Value, low.tension.U)
	c.TensionRatio = run.Known(low.ratio, low.ratio*low.radius.U/low.radius.Value)
	// Runs of one cell share the scale of the images: the mean is no better
	// known than the best of them.
	var sum float64
	u := math.Inf(1)
	for _, p := range ps {
		sum += p.radius.Value / float64(len(ps))
		u = math.Min(u, p.radius.U)
	}
	c.SphereRadiusM = run.Known(sum, u)
}

// effective lists the moduli, repeats joined. What is common to the runs is
// taken from the first of them.
func effective(c *run.CellResult, ps []piece) {
	for _, h := range groups(ps, ratioOf, sameRatio) {
		for _, same := range groups(h, frequencyOf, sameFrequency) {
			p := joined(same)
			c.Effective = append(c.Effective, run.EffectiveModulus{
				HeightRatio: p.ratio, FrequencyHz: p.frequency, Runs: len(same),
				StorageNPerM: run.Known(real(p.k), math.Hypot(p.uStorage, same[0].commonStorage)),
				LossNPerM:    run.Known(imag(p.k), math.Hypot(p.uLoss, same[0].commonLoss)),
			})
		}
	}
}

// groups sorts pieces by key and parts them where neighbours differ by more
// than a share.
func groups(ps []piece, key func(piece) float64, share float64) [][]piece {
	ps = slices.Clone(ps)
	slices.SortStableFunc(ps, func(a, b piece) int { return cmp.Compare(key(a), key(b)) })
	var out [][]piece
	for i, p := range ps {
		if i > 0 && key(p) <= key(ps[i-1])*(1+share) {
			out[len(out)-1] = append(out[len(out)-1], p)
		} else {
			out = append(out, []piece{p})
		}
	}
	return out
}

func ratioOf(p piece) float64     { return p.ratio }
func frequencyOf(p piece) float64 { return p.frequency }

func mean(ps []piece, of func(piece) float64) float64 {
	m := 0.0
	for _, p := range ps {
		m += of(p) / float64(len(ps))
	}
	return m
}

// joined averages repeated measurements, weighted by their scatter, and no
// better than they agree.
func joined(ps []piece) piece {
	out := ps[0]
	if len(ps) == 1 {
		return out
	}
	part := func(value, u func(piece) float64) (float64, float64) {
		var w, v float64
		for _, p := range ps {
			x := 1 / (u(p) * u(p))
			w += x
			v += x * value(p)
		}
		v /= w
		chi := 0.0
		for _, p := range ps {
			chi += math.Pow((value(p)-v)/u(p), 2)
		}
		// The Birge ratio widens where repeats disagree.
		return v, math.Sqrt(math.Max(1, chi/float64(len(ps)-1)) / w)
	}
	re, uRe := part(func(p piece) float64 { return real(p.k) }, func(p piece) float64 { return p.uStorage })
	im, uIm := part(func(p piece) float64 { return imag(p.k) }, func(p piece) float64 { return p.uLoss })
	out.k, out.uStorage, out.uLoss = complex(re, im), uRe, uIm
	out.ratio, out.frequency = mean(ps, ratioOf), mean(ps, frequencyOf)
	return out
}

// frequencies fits the frequency series at each height.
func (t *Tables) frequencies(c *run.CellResult, ps []piece, s Settings) {
	most := 0
	for _, g := range groups(ps, ratioOf, sameRatio) {
		var series []visco.Point
		for _, same := range groups(g, frequencyOf, sameFrequency) {
			p := joined(same)
			series = append(series, visco.Point{FrequencyHz: p.frequency, K: p.k, UStorage: p.uStorage, ULoss: p.uLoss})
		}
		if len(series) < 2 {
			continue
		}
		f := run.FrequencySerie{HeightRatio: mean(g, ratioOf), Frequencies: len(series), Models: []run.ModelFit{}}
		r, err := visco.Rank(series)
		if err != nil {
			f.Why = err.Error()
			c.FrequencyModels = append(c.FrequencyModels, f)
			continue
		}
		f.Decided = r.Decided
		if !r.Decided {
			f.Why = fmt.Sprintf("cannot tell %s from %s at these frequencies", r.Fits[0].Model.Name, r.Fits[1].Model.Name)
		}
		if n := len(r.LeftOut); n > 0 {
			if f.Why != "" {
				f.Why += "; "
			}
			f.Why += fmt.Sprintf("%d more model(s) need more frequencies", n)
		}
		for i, fit := range r.Fits {
			m := run.ModelFit{Model: fit.Model.Name, AICc: fit.AICc, EvidenceRatio: fit.EvidenceRatio, ChiSquared: fit.ChiSquared, Freedom: fit.Freedom}
			var boot []visco.Interval
			if i == 0 {
				boot, _ = visco.Bootstrap(series, fit, s.Bootstrap, 1, nil) // without it the fit's own u stands alone
			}
			for j, name := range fit.Model.Parameters {
				p := run.Parameter{Name: name.Name, Unit: name.Unit, Value: fit.P[j], U: run.Number(fit.U[j])}
				if boot != nil {
					p.Low, p.High = run.Number(boot[j].Low), run.Number(boot[j].High)
				}
				if run.Number(p.Value) != nil {
					m.Parameters = append(m.Parameters, p)
				}
			}
			f.Models = append(f.Models, m)
		}
		if k, err := visco.KramersKronig(series); err == nil {
			f.KramersKronig = &run.Consistency{ChiSquared: k.ChiSquared, Freedom: k.Freedom, P: k.P, Consistent: k.P >= inconsistent}
			if k.P < inconsistent {
				c.Findings = append(c.Findings, run.Finding{Rule: "kramers-kronig", Severity: run.ToReview,
					Value: run.Number(k.P), Limit: run.Number(inconsistent), Unit: "1",
					Message: fmt.Sprintf("At %.2f of the diameter storage and loss modulus do not belong together (p = %.2g): no passive, relaxing material answers so.", f.HeightRatio, k.P),
					Advice:  "Check the lag between force and height and the drag of the medium, and whether the cell changed between the runs."})
			}
		}
		// The crossover is read where most frequencies were measured.
		if len(series) > most {
			if x, err := r.Crossover(series, s.Bootstrap, 2); err == nil {
				most = len(series)
				c.Crossover = crossover(x, r.Fits[0].Model.Name)
			}
		}
		c.FrequencyModels = append(c.FrequencyModels, f)
	}
}

// inconsistent is the probability below which a Kramers-Kronig check is held
// against a series: one false alarm in a hundred cells.
const inconsistent = 0.01

func crossover(x visco.Crossing, model string) *run.Crossover {
	c := &run.Crossover{Value: run.Number(x.Time), Model: model}
	if x.Low > 0 {
		c.Low = run.Number(x.Low)
	}
	c.High = run.Number(x.High)
	if c.Value == nil {
		c.Model = ""
	}
	return c
}

// fewestHeights is the number of heights from which bulk and shear can be told
// apart at all.
const fewestHeights = 3

// heights fits bulk and shear modulus to the height series at each frequency.
func (t *Tables) heights(c *run.CellResult, ps []piece, s Settings) map[float64]*cortex.Moduli {
	found := map[float64]*cortex.Moduli{}
	table, other := t.free, t.stuck
	if s.Plates == "stuck" {
		table, other = other, table
	}
	for _, g := range groups(ps, frequencyOf, sameFrequency) {
		var points []cortex.HeightPoint
		for _, same := range groups(g, ratioOf, sameRatio) {
			p := joined(same)
			points = append(points, cortex.HeightPoint{Ratio: p.ratio,
				Storage: cortex.Quantity{Value: real(p.k), U: p.uStorage}, Loss: cortex.Quantity{Value: imag(p.k), U: p.uLoss}})
		}
		m := run.SheetModuli{FrequencyHz: mean(g, frequencyOf), Heights: len(points)}
		if len(points) < fewestHeights {
			m.Why = fmt.Sprintf("%d height(s): at least %d are needed to tell bulk from shear, some below 0.6 and some above 0.8 of the diameter", len(points), fewestHeights)
			c.Moduli = append(c.Moduli, m)
			continue
		}
		prior := t.prior(g)
		res, err := table.Infer(points, prior, cortex.InferOptions{Bootstrap: s.Bootstrap, Seed: 3})
		if err != nil {
			m.Why = err.Error()
			c.Moduli = append(c.Moduli, m)
			continue
		}
		found[m.FrequencyHz] = res
		fill(&m, res, g[0].force)
		if o, err := other.Infer(points, prior, cortex.InferOptions{}); err == nil {
			x := poisson(o)
			m.PoissonRatioOther = &x
		}
		c.Moduli = append(c.Moduli, m)
	}
	return found
}

// prior is what is known beside the moduli: the tension at the lowest height,
// as uncertain as it is plus half of what it differs between the heights (it is
// not quite the pre-tension), and the common scale of the heights, which is
// that of the cell's radius and spoils moduli and height ratios together.
func (t *Tables) prior(g []piece) cortex.Prior {
	low := slices.MinFunc(g, func(a, b piece) int { return cmp.Compare(a.ratio, b.ratio) })
	least, most := math.Inf(1), 0.0
	for _, p := range g {
		least, most = math.Min(least, p.tension.Value), math.Max(most, p.tension.Value)
	}
	return cortex.Prior{
		Tension: cortex.Quantity{Value: low.tension.Value, U: math.Hypot(low.tension.U, (most-least)/2)},
		ScaleU:  low.radius.U / low.radius.Value,
		Scale:   cortex.ScaleOfRadius,
	}
}

func fill(m *run.SheetModuli, r *cortex.Moduli, force float64) {
	q := func(x cortex.Quantity) *run.Quantity {
		return run.Known(x.Value, math.Hypot(x.U, x.Value*force))
	}
	m.BulkStorageNPerM, m.BulkLossNPerM = q(r.BulkStorage), q(r.BulkLoss)
	m.ShearStorageNPerM, m.ShearLossNPerM = q(r.ShearStorage), q(r.ShearLoss)
	p := poisson(r)
	m.PoissonRatio = &p
	m.Resolved = r.Resolved
	m.DominantUncertainty = string(r.Dominant)
	m.ResidualProbability = run.Number(r.P)
	m.Why = r.Advice
}

func poisson(r *cortex.Moduli) run.Interval95 {
	p := r.PoissonInterval
	return run.Interval95{Value: r.Poisson.Value, U: r.Poisson.U, Low: p.Low, High: p.High, OpenLow: p.OpenLow, OpenHigh: p.OpenHigh}
}

// advise says which further run would help most, and when enough is enough.
func advise(c *run.CellResult, ps []piece, found map[float64]*cortex.Moduli, s Settings) (advice string, enough bool) {
	var say []string
	byHeight := groups(ps, ratioOf, sameRatio)
	switch best, ok := mostHeights(c, found); {
	case !ok && len(byHeight) < fewestHeights:
		say = append(say, fmt.Sprintf("Press to %s of the diameter and oscillate at %.3g Hz again: bulk and shear are told apart by the height.", farthest(byHeight, s), usual(ps)))
	case !ok:
		say = append(say, "Repeat the frequency of the other heights, so that they form a series.")
	default:
		m := found[best]
		if m.Poisson.U <= s.PoissonTargetU && m.Resolved {
			break
		}
		next, err := m.Next(s.LowestRatio, s.HighestRatio)
		switch {
		case err != nil || next.Then > 0.9*next.Now:
			say = append(say, fmt.Sprintf("No further height narrows the Poisson ratio (u = %.2g) much: its uncertainty comes mostly from %s.", m.Poisson.U, m.Dominant))
			enough = true
		default:
			say = append(say, fmt.Sprintf("A run at %.2f of the diameter and %.3g Hz would narrow the Poisson ratio most, from u = %.2g to about %.2g.", next.Ratio, best, next.Now, next.Then))
		}
	}
	if f := undecided(c); f != nil {
		lo, hi := math.Inf(1), 0.0
		for _, p := range ps {
			lo, hi = math.Min(lo, p.frequency), math.Max(hi, p.frequency)
		}
		say = append(say, fmt.Sprintf("At %.2f of the diameter the models cannot be told apart: add %.3g Hz or %.3g Hz.", f.HeightRatio, lo/3, hi*3))
		enough = false
	}
	if len(say) == 0 {
		return "Enough: no further run of this cell would tell much more.", true
	}
	return strings.Join(say, " "), enough
}

// mostHeights returns the frequency whose height series is the longest.
func mostHeights(c *run.CellResult, found map[float64]*cortex.Moduli) (float64, bool) {
	best, most := 0.0, 0
	for _, m := range c.Moduli {
		if found[m.FrequencyHz] != nil && m.Heights > most {
			best, most = m.FrequencyHz, m.Heights
		}
	}
	return best, most > 0
}

func undecided(c *run.CellResult) *run.FrequencySerie {
	for i := range c.FrequencyModels {
		if f := &c.FrequencyModels[i]; !f.Decided && len(f.Models) > 1 {
			return f
		}
	}
	return nil
}

// farthest names the end of the useful range that is farther from what was
// measured.
func farthest(byHeight [][]piece, s Settings) string {
	low, high := byHeight[0], byHeight[len(byHeight)-1]
	if mean(low, ratioOf)-s.LowestRatio > s.HighestRatio-mean(high, ratioOf) {
		return fmt.Sprintf("%.2f", s.LowestRatio)
	}
	return fmt.Sprintf("%.2f", s.HighestRatio)
}

// usual returns the frequency measured most often.
func usual(ps []piece) float64 {
	gs := groups(ps, frequencyOf, sameFrequency)
	return mean(slices.MaxFunc(gs, func(a, b []piece) int { return cmp.Compare(len(a), len(b)) }), frequencyOf)
}
