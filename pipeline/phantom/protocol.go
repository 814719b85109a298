package phantom

import (
	"math"

	"platen/pipeline/run"
)

// Move is one thing that the plate does, from wherever the move before left
// it. Use Ramp, Hold and Oscillate.
type Move struct {
	ToM, SpeedMPerS         float64 // a ramp to a height at a speed
	FrequencyHz, AmplitudeM float64 // an oscillation about the height it begins at
	Cycles                  float64
	DurationS               float64 // a hold, when neither speed nor frequency is given
}

// Ramp moves the plate to a separation in m at a speed in m/s.
func Ramp(toM, speedMPerS float64) Move { return Move{ToM: toM, SpeedMPerS: speedMPerS} }

// Hold keeps the plate where it is for a time in s.
func Hold(seconds float64) Move { return Move{DurationS: seconds} }

// Oscillate moves the plate in a sine of the amplitude in m for a number of
// cycles. Whole cycles end where they began.
func Oscillate(frequencyHz, amplitudeM, cycles float64) Move {
	return Move{FrequencyHz: frequencyHz, AmplitudeM: amplitudeM, Cycles: cycles}
}

// Standard returns the usual course of a run on a cell of the given sphere
// radius: 4 s of baseline 2 um above the cell, down at 1.5 um/s to 0.6 of its
// height, 8 s to relax, 12 cycles at 1 Hz that stretch its area by about 1 %,
// up at 2 um/s, 4 s of baseline.
func Standard(radiusM float64) (startM float64, moves []Move) {
	return Course(radiusM, 0.6, 1, 0.0224, 12)
}

// Course is Standard for another height ratio, frequency, amplitude of the
// height ratio, and number of cycles.
func Course(radiusM, heightRatio, frequencyHz, amplitudeRatio, cycles float64) (startM float64, moves []Move) {
	d := 2 * radiusM
	startM = d + 2e-6
	return startM, []Move{
		Hold(4),
		Ramp(heightRatio*d, 1.5e-6),
		Hold(8),
		Oscillate(frequencyHz, amplitudeRatio*d, cycles),
		Hold(2),
		Ramp(startM, 2e-6),
		Hold(4),
	}
}

// leg is a move with its place in time and height.
type leg struct {
	Move
	mode         run.Mode
	from, to     float64 // s
	fromM, slope float64 // height at the start, m/s
	minM         float64 // lowest height
}

// at returns the height at time t of the run.
func (l leg) at(t float64) float64 {
	if l.mode == run.Oscillation {
		return l.fromM + l.AmplitudeM*math.Sin(2*math.Pi*l.FrequencyHz*(t-l.from))
	}
	return l.fromM + l.slope*(t-l.from)
}

// plan lays the moves one behind the other.
func plan(startM float64, moves []Move) []leg {
	var legs []leg
	t, h := 0.0, startM
	for _, m := range moves {
		l := leg{Move: m, from: t, fromM: h, minM: h}
		switch {
		case m.FrequencyHz > 0:
			l.mode = run.Oscillation
			l.to = t + m.Cycles/m.FrequencyHz
			l.minM = h - m.AmplitudeM
		case m.SpeedMPerS > 0:
			if m.ToM == h {
				continue
			}
			l.mode, l.slope = run.Retract, m.SpeedMPerS
			if m.ToM < h {
				l.mode, l.slope = run.Approach, -m.SpeedMPerS
			}
			l.to = t + (m.ToM-h)/l.slope
			l.minM = math.Min(h, m.ToM)
		default:
			l.mode = run.Hold
			l.to = t + m.DurationS
		}
		h = l.at(l.to)
		if m.SpeedMPerS > 0 {
			h = m.ToM
		}
		t = l.to
		legs = append(legs, l)
	}
	return legs
}
