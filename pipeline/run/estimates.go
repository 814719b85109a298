package run

// Completion tells how it was known that no more samples will come.
type Completion string

// The ways in which a run ends.
const (
	Growing    Completion = ""         // still being written
	ByCount    Completion = "declared" // the declared number of samples is there
	ByEndMark  Completion = "end-mark" // a last line "# end"
	BySettling Completion = "settled"  // the file has not changed for a while
)

// Estimates is everything known of a run at one moment, provisional while the
// run is being written and final once it has ended. The rules of package qc
// judge it; the Result is made from it.
type Estimates struct {
	Header     Header
	Completion Completion
	Samples    int64   // rows read
	FromS, ToS float64 // first and last time
	RateHz     float64 // sampling rate, 0 while unknown

	// What turned deflection into force, where it is known, and where it is
	// from ("header" or "settings").
	SpringConstant    *Quantity
	Sensitivity       *Quantity
	CalibrationSource string

	Reference *Reference // of a thermal or blank run

	Sampling Sampling
	Clips    []Clip

	Baseline *Baseline
	Contact  *Contact
	Volumes  []Volume // one per source, most trusted first; the first is used
	Imaged   *ImagedVolume
	Losses   []Interval // stretches in which the cell carried no force though the plate was down
	Adhesion *Adhesion

	Segments []Segment
	// Ended is the number of leading Segments that are over; the rest may
	// still change.
	Ended int

	// Trouble is set when the bytes could not be read as a run to their end.
	Trouble *Trouble
	// NULTail counts NUL bytes at the end of the file (a file allocated
	// before it was written, or a crash of the writer).
	NULTail int64
}

// Interval is a stretch of time in s.
type Interval struct{ FromS, ToS float64 }

// Sampling describes the time base.
type Sampling struct {
	Even        bool    // the stamps agree with an even rate within their own rounding
	Gaps        int     // jumps forward of more than 1.5 sample intervals
	MissingS    float64 // time inside gaps beyond the usual interval
	Longest     Interval
	Backward    int // stamps that are not later than the one before, beyond rounding
	FirstBackS  float64
	FirstBackAt int64 // row
}

// Clip is a stretch in which a channel stood still at an extreme value.
type Clip struct {
	Channel  string // "force", "deflection" or "height"
	Interval        // first to last clipped sample
	Samples  int64  // samples at the extreme value
	Longest  int64  // longest uninterrupted stretch, samples
	Fraction float64
	Value    float64 // N or m
	Dead     bool    // the channel never changed at all
}

// Baseline is the force with no cell under the plate: OffsetN at time RefS and
// a constant slope.
type Baseline struct {
	RefS    float64
	OffsetN Quantity
	SlopeN  Quantity // N/s
	BeforeS float64  // seconds of no contact before the first contact
	AfterS  float64  // and after release
	NoiseN  float64  // rms scatter of single samples about the line
}

// Contact is the first touch of plate and cell on the approach.
type Contact struct {
	TimeS   float64
	HeightM Quantity
}

// Volume is the cell's volume from one source.
type Volume struct {
	Source  VolumeSource
	RadiusM Quantity // of the uncompressed sphere
}

// ImagedVolume is the course of the imaged volume over the run.
type ImagedVolume struct {
	Images int
	Interval
	Change Quantity // relative change over the interval, from a straight line
}

// Adhesion is the pull on the plate when it leaves the cell.
type Adhesion struct {
	AtS      float64
	PullN    Quantity // positive: the cell holds the plate back
	MaxLoadN float64  // largest compressive force of the run, to compare with
}

// Trouble says why bytes could not be read as a run.
type Trouble struct {
	Line  int64 // from 1, 0 when not known
	Byte  int64 // offset from the start of the file
	Want  string
	Got   string
	Fix   string
	IsRun bool // columns of a run were recognised before the trouble
}
