package qc

import (
	"fmt"
	"math"
)

// Limits are the limits of all rules, in the units that the settings file uses
// and its names carry. Each comment gives the reason for the default.
type Limits struct {
	// 5 pN/s moves the zero by 0.3 nN in a minute, some per cent of a usual load
	// of a few nN; 20 pN/s by more than 1 nN. A straight drift is taken out, but
	// one this fast is seldom straight.
	ForceDriftReview float64 `toml:"force_drift_review_pn_per_s"`
	ForceDriftRepeat float64 `toml:"force_drift_repeat_pn_per_s"`

	// 10 nm/s are 1 % of a usual height of 12 µm in 12 s, as much as the
	// oscillation itself strains the cell; 40 nm/s change the force by some
	// 14 % in that time at one and the same tension (a 19 µm cell at half height).
	HeightDriftReview float64 `toml:"height_drift_review_nm_per_s"`
	HeightDriftRepeat float64 `toml:"height_drift_repeat_nm_per_s"`

	// 20 % a minute are 4 % in 12 cycles at 1 Hz, more than the modulus is worth
	// knowing; at 60 % a minute there is no one tension to speak of.
	TensionDriftReview float64 `toml:"tension_drift_review_percent_per_min"`
	TensionDriftRepeat float64 `toml:"tension_drift_repeat_percent_per_min"`

	// 30 dB is a modulus known to 3.2 %, and so a loss part of a third of it to
	// 10 %; 20 dB is 10 % and 30 %.
	LowSNRReview float64 `toml:"low_snr_review_db"`
	LowSNRRepeat float64 `toml:"low_snr_repeat_db"`
	// 6 dB is a sine twice as large as the noise of single samples: below, no eye
	// sees hum or a jolt. It may be negative.
	LowSNRSample float64 `toml:"low_snr_sample_review_db"`

	// A cell that is only squeezed keeps its volume. 4 % of it are 1.3 % of
	// diameter and some 10 % of modulus; 8 % are twice that.
	VolumeChangeReview float64 `toml:"volume_change_review_percent"`
	VolumeChangeRepeat float64 `toml:"volume_change_repeat_percent"`

	// 5 % of volume are 1.7 % of diameter, and 7 % of tension, which goes with
	// about its fourth power.
	VolumeDisagreement float64 `toml:"volume_disagreement_review_percent"`

	// 0.05 % of area are 13 nm of height (a 19 µm cell at half height): less
	// drowns in the noise of the height. A bare membrane ruptures at 3 to 5 % (BioNumbers 110907):
	// from 3 % on the answer need not be linear, 6 % is beyond.
	StrainLeast  float64 `toml:"strain_least_percent"`
	StrainReview float64 `toml:"strain_review_percent"`
	StrainRepeat float64 `toml:"strain_repeat_percent"`

	// 10 % of harmonics is a visibly bent loop; at 25 % a storage and a loss
	// modulus describe nothing (common practice, no source).
	DistortReview float64 `toml:"distortion_review_percent"`
	DistortRepeat float64 `toml:"distortion_repeat_percent"`

	// Below three cycles there is no scatter from cycle to cycle.
	FewestCycles float64 `toml:"fewest_cycles"`

	// Half a second is the shortest stretch that the analysis judges.
	ContactLoss float64 `toml:"contact_loss_repeat_s"`

	// Ten or more equal extreme samples in a row are no noise, so any is worth a
	// look; beyond 0.1 % more than one peak is cut (common practice, no source).
	ClippedReview float64 `toml:"clipped_review_percent"`
	ClippedRepeat float64 `toml:"clipped_repeat_percent"`

	// 20 ms are a fiftieth of a usual cycle of 1 s; 2 s are two cycles.
	GapReview float64 `toml:"sample_gap_review_ms"`
	GapRepeat float64 `toml:"sample_gap_repeat_ms"`

	// A few rows out of order may be harmless; more is no time base (common
	// practice, no source).
	StepsBackRepeat float64 `toml:"time_order_repeat_steps"`

	// The shape model has no adhesion: a cell that sticks has a larger contact
	// than computed (common practice, no source for 5 and 20 %). 100 pN are 5 % of
	// 2 nN: under a smaller load a small pull would count as a large share.
	AdhesionReview float64 `toml:"adhesion_review_percent"`
	AdhesionRepeat float64 `toml:"adhesion_repeat_percent"`
	AdhesionLeast  float64 `toml:"adhesion_least_pn"`

	// A run that lacks a fifth usually lacks the oscillation.
	TruncatedRepeat float64 `toml:"truncated_repeat_percent"`

	// 1 is a perfect fit; with some hundred averages noise alone stays below
	// 1.2, and a second resonance or hum goes far above 2.
	ThermalMisfit float64 `toml:"thermal_misfit_review"`
}

// Defaults returns the limits in force where the user gives none.
func Defaults() Limits {
	return Limits{
		ForceDriftReview:   5,
		ForceDriftRepeat:   20,
		HeightDriftReview:  10,
		HeightDriftRepeat:  40,
		TensionDriftReview: 20,
		TensionDriftRepeat: 60,
		LowSNRReview:       30,
		LowSNRRepeat:       20,
		LowSNRSample:       6,
		VolumeChangeReview: 4,
		VolumeChangeRepeat: 8,
		VolumeDisagreement: 5,
		StrainLeast:        0.05,
		StrainReview:       3,
		StrainRepeat:       6,
		DistortReview:      10,
		DistortRepeat:      25,
		FewestCycles:       3,
		ContactLoss:        0.5,
		ClippedReview:      0,
		ClippedRepeat:      0.1,
		GapReview:          20,
		GapRepeat:          2000,
		StepsBackRepeat:    3,
		AdhesionReview:     5,
		AdhesionRepeat:     20,
		AdhesionLeast:      100,
		TruncatedRepeat:    20,
		ThermalMisfit:      2,
	}
}

// Validate reports the first limit that makes no sense: its name in the
// settings file, its value, and what is allowed.
func (l Limits) Validate() error {
	unbounded := math.Inf(1)
	// Each is at least 0 and finite, and at most the limit it must not pass.
	// That one is checked before what hangs on it.
	for _, p := range []struct {
		key   string
		value float64
		most  float64
		named string // the key that most is the value of
	}{
		{"force_drift_repeat_pn_per_s", l.ForceDriftRepeat, unbounded, ""},
		{"force_drift_review_pn_per_s", l.ForceDriftReview, l.ForceDriftRepeat, "force_drift_repeat_pn_per_s"},
		{"height_drift_repeat_nm_per_s", l.HeightDriftRepeat, unbounded, ""},
		{"height_drift_review_nm_per_s", l.HeightDriftReview, l.HeightDriftRepeat, "height_drift_repeat_nm_per_s"},
		{"tension_drift_repeat_percent_per_min", l.TensionDriftRepeat, unbounded, ""},
		{"tension_drift_review_percent_per_min", l.TensionDriftReview, l.TensionDriftRepeat, "tension_drift_repeat_percent_per_min"},
		{"low_snr_review_db", l.LowSNRReview, unbounded, ""}, // a small ratio is the bad one
		{"low_snr_repeat_db", l.LowSNRRepeat, l.LowSNRReview, "low_snr_review_db"},
		{"volume_change_repeat_percent", l.VolumeChangeRepeat, unbounded, ""},
		{"volume_change_review_percent", l.VolumeChangeReview, l.VolumeChangeRepeat, "volume_change_repeat_percent"},
		{"volume_disagreement_review_percent", l.VolumeDisagreement, unbounded, ""},
		{"strain_repeat_percent", l.StrainRepeat, unbounded, ""},
		{"strain_review_percent", l.StrainReview, l.StrainRepeat, "strain_repeat_percent"},
		{"strain_least_percent", l.StrainLeast, l.StrainReview, "strain_review_percent"},
		{"distortion_repeat_percent", l.DistortRepeat, unbounded, ""},
		{"distortion_review_percent", l.DistortReview, l.DistortRepeat, "distortion_repeat_percent"},
		{"fewest_cycles", l.FewestCycles, unbounded, ""},
		{"contact_loss_repeat_s", l.ContactLoss, unbounded, ""},
		{"clipped_repeat_percent", l.ClippedRepeat, 100, ""},
		{"clipped_review_percent", l.ClippedReview, l.ClippedRepeat, "clipped_repeat_percent"},
		{"sample_gap_repeat_ms", l.GapRepeat, unbounded, ""},
		{"sample_gap_review_ms", l.GapReview, l.GapRepeat, "sample_gap_repeat_ms"},
		{"time_order_repeat_steps", l.StepsBackRepeat, unbounded, ""},
		{"adhesion_repeat_percent", l.AdhesionRepeat, unbounded, ""},
		{"adhesion_review_percent", l.AdhesionReview, l.AdhesionRepeat, "adhesion_repeat_percent"},
		{"adhesion_least_pn", l.AdhesionLeast, unbounded, ""},
		{"truncated_repeat_percent", l.TruncatedRepeat, 100, ""},
		{"thermal_misfit_review", l.ThermalMisfit, unbounded, ""},
	} {
		if p.value >= 0 && p.value <= p.most && !math.IsInf(p.value, 0) {
			continue
		}
		allowed := "0 or more"
		if !math.IsInf(p.most, 0) {
			allowed = fmt.Sprintf("from 0 to %g", p.most)
		}
		if p.named != "" {
			allowed += " (" + p.named + ")"
		}
		return fmt.Errorf("limits.%s = %g: must be %s", p.key, p.value, allowed)
	}
	if math.IsNaN(l.LowSNRSample) || math.IsInf(l.LowSNRSample, 0) {
		return fmt.Errorf("limits.low_snr_sample_review_db = %g: must be a finite number", l.LowSNRSample)
	}
	return nil
}
