package calib

import (
	"fmt"
	"math"

	"gonum.org/v1/gonum/dsp/fourier"
	"gonum.org/v1/gonum/dsp/window"
)

// SegmentSamples is the length of one segment of a Spectrum: at 50 kHz its bins
// are 12 Hz wide, a few tens of which lie across a resonance in liquid.
const SegmentSamples = 4096

// Spectrum accumulates a one-sided power spectral density by Welch's method
// (IEEE Trans. Audio Electroacoust. 15, 1967): segments of SegmentSamples that
// overlap by half, each less its mean, Hann window. Memory does not grow with
// the record. The zero value is ready.
type Spectrum struct {
	fft     *fourier.FFT
	window  []float64
	buffer  []float64
	work    []float64
	coeff   []complex128
	sum     []float64
	count   int
	samples int64
}

// Add takes the next sample.
func (s *Spectrum) Add(x float64) {
	if s.fft == nil {
		s.fft = fourier.NewFFT(SegmentSamples)
		s.window = make([]float64, SegmentSamples)
		for i := range s.window {
			s.window[i] = 1
		}
		s.window = window.Hann(s.window)
		s.work = make([]float64, SegmentSamples)
		s.sum = make([]float64, SegmentSamples/2+1)
	}
	s.samples++
	s.buffer = append(s.buffer, x)
	if len(s.buffer) < SegmentSamples {
		return
	}
	mean := 0.0
	for _, v := range s.buffer {
		mean += v / SegmentSamples
	}
	for i, v := range s.buffer {
		s.work[i] = (v - mean) * s.window[i]
	}
	s.coeff = s.fft.Coefficients(s.coeff, s.work)
	for i, c := range s.coeff {
		s.sum[i] += real(c)*real(c) + imag(c)*imag(c)
	}
	s.count++
	s.buffer = s.buffer[:copy(s.buffer, s.buffer[SegmentSamples/2:])]
}

// PSD is a one-sided power spectral density: Density[i], in unit^2/Hz, at
// Frequency[i] in Hz; the first bin (the mean) is left out.
type PSD struct {
	Frequency, Density []float64
	Rate               float64 // samples a second
	// Averages is the number of independent averages that the overlapping
	// segments are worth, so that the relative standard deviation of a bin is
	// 1/sqrt(Averages): for Hann and half overlap neighbouring segments'
	// powers correlate by 1/36 (Welch 1967).
	Averages float64
}

// fewestSegments is the number of segments below which the scatter of the bins
// is too far from normal for a fit.
const fewestSegments = 8

// PSD returns the density of what was added, at rate samples a second.
func (s *Spectrum) PSD(rate float64) (PSD, error) {
	if s.count < fewestSegments {
		return PSD{}, fmt.Errorf("a noise spectrum needs at least %d samples, there are %d: record longer", (fewestSegments+1)*SegmentSamples/2, s.samples)
	}
	if !(rate > 0) {
		return PSD{}, fmt.Errorf("a noise spectrum needs a sampling rate, got %g", rate)
	}
	power := 0.0
	for _, w := range s.window {
		power += w * w
	}
	n := len(s.sum) - 2 // neither the mean nor the Nyquist bin
	p := PSD{Frequency: make([]float64, n), Density: make([]float64, n), Rate: rate,
		Averages: float64(s.count) / (1 + 2./36*(1-1/float64(s.count)))}
	for i := range n {
		p.Frequency[i] = float64(i+1) * rate / SegmentSamples
		p.Density[i] = 2 * s.sum[i+1] / (float64(s.count) * rate * power)
		if !(p.Density[i] > 0) || math.IsInf(p.Density[i], 0) {
			return PSD{}, fmt.Errorf("the record does not fluctuate at %g Hz: is the deflection exported?", p.Frequency[i])
		}
	}
	return p, nil
}
