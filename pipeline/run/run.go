// Package run holds the shared nouns of platen and nothing else: what a run
// file says of itself (Header), a stretch of its samples (Block), what is
// estimated from them (Estimates, Segment), what is wrong (Finding), and the
// document that is printed, stored and archived (Result).
//
// Start with Result: everything else leads to it. The package reads no file,
// computes nothing and imports only the standard library.
//
// Units are SI everywhere. A quantity that could not be estimated is a nil
// pointer, so that it is absent from the document: never zero, never NaN.
package run

import (
	"math"
	"time"
)

// Schema is the name and number of the result document. Within one number
// fields are only ever added.
const Schema = "platen.run/1"

// Kind tells what a run measured.
type Kind string

// The kinds of run. A file that names none is a cell run.
const (
	KindCell    Kind = "cell"
	KindBlank   Kind = "blank"
	KindGlass   Kind = "glass"
	KindThermal Kind = "thermal"
)

// Quantity is a value with its standard uncertainty (JCGM 100), both in the SI
// unit that the field holding it names.
type Quantity struct {
	Value float64 `json:"value"`
	U     float64 `json:"u"`
}

// Known returns a Quantity, or nil where value or uncertainty is not finite:
// the one door by which estimates enter a document.
func Known(value, u float64) *Quantity {
	if math.IsNaN(value) || math.IsInf(value, 0) || math.IsNaN(u) || math.IsInf(u, 0) || u < 0 {
		return nil
	}
	return &Quantity{Value: value, U: u}
}

// Number returns a pointer to v, or nil where v is not finite.
func Number(v float64) *float64 {
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return nil
	}
	return &v
}

// Header is what a run file says of itself; every field may be missing (empty,
// zero or nil).
type Header struct {
	Kind      Kind
	Cell      string
	Session   string
	Condition string
	Operator  string
	Medium    string
	Note      string
	Started   time.Time // with the zone as written

	SpringConstantNPerM *Quantity
	SensitivityMPerV    *Quantity // deflection per volt of the sensor
	DiameterM           *Quantity // of the uncompressed cell
	TemperatureK        *Quantity
	Samples             int64   // declared number of samples, 0 when not declared
	DriveFrequencyHz    float64 // declared, 0 when not
}

// Block is a stretch of consecutive samples in SI units. All non-nil slices
// have the same length. A channel that the file has not is nil; a sparse
// channel (Radius, Area, Temperature) holds NaN where it was not measured.
// The slices belong to the decoder and are valid only during the call that
// hands the block over.
type Block struct {
	FirstRow int64 // index of the first sample in the run, from 0

	Time        []float64 // s, as stamped in the file
	TimeQuantum []float64 // s, size of one unit in the last printed digit of each stamp; nil when stamps are exact

	Force       []float64 // N, positive when the plate pushes on the cell
	DeflectionM []float64 // m, of the force sensor
	DeflectionV []float64 // V, raw sensor signal, needs the sensitivity
	Height      []float64 // m, plate separation
	Drive       []float64 // m, drive position; height = drive - deflection
	Radius      []float64 // m, imaged equator radius, sparse
	Area        []float64 // m^2, imaged cross-section area, sparse
	Temperature []float64 // K, sparse
	Segment     []int32   // segment label of the exporter; nil when the file has none
}

// Len returns the number of samples in the block.
func (b *Block) Len() int { return len(b.Time) }

// Mode tells what the plate did during a segment.
type Mode string

// The modes of a segment.
const (
	Approach    Mode = "approach"
	Hold        Mode = "hold"
	Oscillation Mode = "oscillation"
	Retract     Mode = "retract"
)

// Segment is what was estimated over one stretch of a run in which the plate
// did one thing.
type Segment struct {
	Index int     `json:"index"`
	Mode  Mode    `json:"mode"`
	FromS float64 `json:"from_s"`
	ToS   float64 `json:"to_s"`

	HeightM          *Quantity `json:"height_m,omitempty"`             // mean plate separation
	HeightRatio      *Quantity `json:"height_ratio,omitempty"`         // mean height over the sphere diameter
	HeightSlopeMPerS *Quantity `json:"height_slope_m_per_s,omitempty"` // trend with the oscillation taken out
	ForceN           *Quantity `json:"force_n,omitempty"`              // mean force above the baseline
	TensionNPerM     *Quantity `json:"tension_n_per_m,omitempty"`      // mean effective tension
	TensionSlope     *Quantity `json:"tension_slope_n_per_m_s,omitempty"`
	VolumeChange     *Quantity `json:"volume_change,omitempty"` // imaged volume of this segment over the run's first images, minus 1

	Relaxation          *Decay    `json:"relaxation,omitempty"` // of the tension, during a hold after a step
	FrequencyHz         *Quantity `json:"frequency_hz,omitempty"`
	Cycles              float64   `json:"cycles,omitempty"`
	HeightAmplitudeM    *Quantity `json:"height_amplitude_m,omitempty"`
	ForceAmplitudeN     *Quantity `json:"force_amplitude_n,omitempty"`
	AreaStrainAmplitude *Quantity `json:"area_strain_amplitude,omitempty"`
	StorageNPerM        *Quantity `json:"storage_n_per_m,omitempty"`
	LossNPerM           *Quantity `json:"loss_n_per_m,omitempty"`
	PhaseDeg            *Quantity `json:"phase_deg,omitempty"`
	SNRdB               *float64  `json:"snr_db,omitempty"`     // of the force: 20 log10(rms of the fundamental / rms residual)
	Distortion          *float64  `json:"distortion,omitempty"` // of the tension: rms of harmonics 2 and 3 over the fundamental

	// Why says why an oscillation has no modulus, or a hold no tension.
	Why string `json:"why,omitempty"`

	// The part of the uncertainty that scatters from cycle to cycle (type A,
	// JCGM 100); what remains is common to all segments of the rig.
	TensionScatter *float64 `json:"tension_u_scatter_n_per_m,omitempty"`
	StorageScatter *float64 `json:"storage_u_scatter_n_per_m,omitempty"`
	LossScatter    *float64 `json:"loss_u_scatter_n_per_m,omitempty"`
}

// Severity orders findings; it is also what a finding makes of the verdict.
type Severity string

// The severities, mildest first.
const (
	Info     Severity = "info"
	ToReview Severity = "review"
	ToRepeat Severity = "repeat"
)

// Finding says that a rule tripped: what, where, how far beyond which limit,
// and what to do about it.
type Finding struct {
	Rule     string   `json:"rule"`
	Severity Severity `json:"severity"`
	Segment  *int     `json:"segment,omitempty"` // index into Segments; absent when the whole run is meant
	FromS    float64  `json:"from_s"`
	ToS      float64  `json:"to_s"`
	Value    *float64 `json:"value,omitempty"`
	U        *float64 `json:"u,omitempty"`
	Limit    *float64 `json:"limit,omitempty"`
	Unit     string   `json:"unit,omitempty"`
	Message  string   `json:"message"`
	Advice   string   `json:"advice"`
}

// Verdict says whether the cell's run can be kept.
type Verdict string

// The verdicts.
const (
	Accept Verdict = "accept"
	Review Verdict = "review"
	Repeat Verdict = "repeat"
)

// VolumeSource names where the cell volume came from, most trusted first.
type VolumeSource string

// The sources of the cell volume.
const (
	VolumeImaged   VolumeSource = "imaged"
	VolumeDeclared VolumeSource = "declared"
	VolumeContact  VolumeSource = "contact"
)

// Result is the document that platen check --json prints, the store keeps and
// the archive carries. It is a pure function of the file's bytes, the settings,
// the calibrations it names and the software version.
type Result struct {
	Schema      string      `json:"schema"`
	Run         Identity    `json:"run"`
	Verdict     Verdict     `json:"verdict"`
	Findings    []Finding   `json:"findings"`
	Cell        *CellState  `json:"cell,omitempty"`
	Reference   *Reference  `json:"reference,omitempty"` // what a thermal or blank run measured
	Segments    []Segment   `json:"segments"`
	Calibration Calibration `json:"calibration"`
	Software    Software    `json:"software"`
}

// Identity names a run and the file it came from.
type Identity struct {
	ID        string  `json:"id"`   // SHA-256 of the bytes, hexadecimal
	File      string  `json:"file"` // path below the watched folder, with forward slashes
	Kind      Kind    `json:"kind"`
	Cell      string  `json:"cell,omitempty"`
	Session   string  `json:"session,omitempty"`
	Condition string  `json:"condition,omitempty"`
	Operator  string  `json:"operator,omitempty"`
	Medium    string  `json:"medium,omitempty"`
	Note      string  `json:"note,omitempty"`
	Started   string  `json:"started,omitempty"` // RFC 3339
	Samples   int64   `json:"samples"`
	DurationS float64 `json:"duration_s"`
	Complete  bool    `json:"complete"` // false where samples declared are missing or the file could not be read to its end
}

// CellState is the cell's size, the same for all segments of the run.
type CellState struct {
	VolumeM3      *Quantity    `json:"volume_m3,omitempty"`
	SphereRadiusM *Quantity    `json:"sphere_radius_m,omitempty"`
	VolumeSource  VolumeSource `json:"volume_source,omitempty"`
	ContactM      *Quantity    `json:"contact_height_m,omitempty"` // plate separation at first contact
}

// Calibration names what the numbers rest on.
type Calibration struct {
	SpringConstantNPerM *Quantity `json:"spring_constant_n_per_m,omitempty"`
	SensitivityMPerV    *Quantity `json:"sensitivity_m_per_v,omitempty"`
	BaselineN           *Quantity `json:"baseline_n,omitempty"` // force at no contact, at the run's middle
	BaselineSlopeNPerS  *Quantity `json:"baseline_slope_n_per_s,omitempty"`
	Source              string    `json:"source"`      // "header", "settings" or "none"
	Corrections         []string  `json:"corrections"` // names of the corrections applied: "baseline", "drag", "lag"
}

// Reference is what a reference run measured of the instrument.
type Reference struct {
	SpringConstantNPerM *Quantity `json:"spring_constant_n_per_m,omitempty"`
	ResonanceHz         *Quantity `json:"resonance_hz,omitempty"`
	QualityFactor       *Quantity `json:"quality_factor,omitempty"`
	MeanSquareM2        *Quantity `json:"mean_square_m2,omitempty"` // of the first mode
	TemperatureK        *Quantity `json:"temperature_k,omitempty"`
	Factor              float64   `json:"equipartition_factor,omitempty"`
	Misfit              *float64  `json:"misfit,omitempty"` // scatter about the fitted spectrum over what the averages allow; near 1
	Why                 string    `json:"why,omitempty"`    // why there is no spring constant

	// Of a blank run: the force while the plate stands.
	ForceNoiseN *float64     `json:"force_noise_n,omitempty"` // rms of single samples about a straight line
	Allan       []AllanPoint `json:"allan,omitempty"`         // overlapping Allan deviation
	SteadiestS  *float64     `json:"steadiest_s,omitempty"`   // averaging time of the smallest one: averaging for longer gains nothing
}

// AllanPoint is the Allan deviation of the force at one averaging time.
type AllanPoint struct {
	TimeS      float64 `json:"time_s"`
	DeviationN float64 `json:"deviation_n"`
}

// Software names the program and the settings that made a result.
type Software struct {
	Version  string `json:"version"`
	Settings string `json:"settings"` // SHA-256 of the settings in force, hexadecimal
}
