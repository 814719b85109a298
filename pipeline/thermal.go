package pipeline

import (
	"errors"

	"platen/pipeline/calib"
	"platen/pipeline/run"
)

// thermal measures the spring constant from the thermal noise of the deflection.
func (s *sampler) thermal(e *run.Estimates, set Settings) *run.Reference {
	ref := &run.Reference{Factor: set.ThermalFactor}
	temperature := run.Quantity{Value: set.TemperatureC + absoluteZeroC, U: set.TemperatureUC}
	if t := e.Header.TemperatureK; t != nil && t.Value > 0 {
		temperature = *t
	}
	ref.TemperatureK = &temperature
	psd, err := s.spectrum.PSD(e.RateHz)
	if err != nil {
		ref.Why = err.Error()
		return ref
	}
	t, err := calib.FitThermal(psd)
	if err != nil {
		ref.Why = err.Error()
		if !errors.Is(err, calib.ErrPeak) {
			return ref
		}
	}
	ref.ResonanceHz = run.Known(t.Resonance, t.UResonance)
	ref.QualityFactor = run.Known(t.Quality, t.UQuality)
	ref.MeanSquareM2 = run.Known(t.MeanSquare, t.UMeanSquare)
	ref.Misfit = run.Number(t.Misfit)
	if err != nil {
		return ref
	}
	relative := 0.0
	if q := e.Sensitivity; q != nil && q.Value > 0 {
		relative = q.U / q.Value
	}
	ref.SpringConstantNPerM = run.Known(calib.SpringConstant(t, set.ThermalFactor, temperature.Value, temperature.U, relative))
	return ref
}
