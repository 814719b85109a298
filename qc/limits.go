package qc

import (
	"fmt"
	"math"
)

// Limits are the limits of all rules. Names carry the unit that the settings
// file uses; Rules gives the reason for each default.
type Limits struct {
	ForceDriftReview float64 `toml:"force_drift_review_pn_per_s"`
	ForceDriftRepeat float64 `toml:"force_drift_repeat_pn_per_s"`

	HeightDriftReview float64 `toml:"height_drift_review_nm_per_s"`
	HeightDriftRepeat float64 `toml:"height_drift_repeat_nm_per_s"`

	TensionDriftReview float64 `toml:"tension_drift_review_percent_per_min"`
	TensionDriftRepeat float64 `toml:"tension_drift_repeat_percent_per_min"`

	LowSNRReview float64 `toml:"low_snr_review_db"`
	LowSNRRepeat float64 `toml:"low_snr_repeat_db"`
	LowSNRSample float64 `toml:"low_snr_sample_review_db"` // of single samples, may be negative

	VolumeChangeReview float64 `toml:"volume_change_review_percent"`
	VolumeChangeRepeat float64 `toml:"volume_change_repeat_percent"`

	VolumeDisagreement float64 `toml:"volume_disagreement_review_percent"`

	StrainLeast   float64 `toml:"strain_least_percent"`
	StrainReview  float64 `toml:"strain_review_percent"`
	StrainRepeat  float64 `toml:"strain_repeat_percent"`
	DistortReview float64 `toml:"distortion_review_percent"`
	DistortRepeat float64 `toml:"distortion_repeat_percent"`

	FewestCycles float64 `toml:"fewest_cycles"`

	ContactLoss float64 `toml:"contact_loss_repeat_s"`

	ClippedReview float64 `toml:"clipped_review_percent"`
	ClippedRepeat float64 `toml:"clipped_repeat_percent"`

	GapReview float64 `toml:"sample_gap_review_ms"`
	GapRepeat float64 `toml:"sample_gap_repeat_ms"`

	StepsBackRepeat float64 `toml:"time_order_repeat_steps"`

	AdhesionReview float64 `toml:"adhesion_review_percent"`
	AdhesionRepeat float64 `toml:"adhesion_repeat_percent"`
	AdhesionLeast  float64 `toml:"adhesion_least_pn"`

	TruncatedRepeat float64 `toml:"truncated_repeat_percent"`

	ThermalMisfit float64 `toml:"thermal_misfit_review"` // 1 for a perfect fit
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

// Validate reports the first limit that makes no sense, by the name it has in
// the settings file.
func (l Limits) Validate() error {
	for _, p := range []struct {
		key            string
		review, repeat float64
	}{
		{"force_drift", l.ForceDriftReview, l.ForceDriftRepeat},
		{"height_drift", l.HeightDriftReview, l.HeightDriftRepeat},
		{"tension_drift", l.TensionDriftReview, l.TensionDriftRepeat},
		{"low_snr", l.LowSNRRepeat, l.LowSNRReview}, // a small ratio is the bad one
		{"volume_change", l.VolumeChangeReview, l.VolumeChangeRepeat},
		{"volume_disagreement", l.VolumeDisagreement, l.VolumeDisagreement},
		{"strain", l.StrainLeast, l.StrainReview},
		{"strain", l.StrainReview, l.StrainRepeat},
		{"distortion", l.DistortReview, l.DistortRepeat},
		{"fewest_cycles", l.FewestCycles, l.FewestCycles},
		{"contact_loss", l.ContactLoss, l.ContactLoss},
		{"clipped", l.ClippedReview, l.ClippedRepeat},
		{"sample_gap", l.GapReview, l.GapRepeat},
		{"time_order", l.StepsBackRepeat, l.StepsBackRepeat},
		{"adhesion", l.AdhesionReview, l.AdhesionRepeat},
		{"adhesion_least", l.AdhesionLeast, l.AdhesionLeast},
		{"truncated", l.TruncatedRepeat, l.TruncatedRepeat},
		{"thermal_misfit", l.ThermalMisfit, l.ThermalMisfit},
	} {
		for _, v := range []float64{p.review, p.repeat} {
			if math.IsNaN(v) || math.IsInf(v, 0) || v < 0 {
				return fmt.Errorf("limits.%s...: %g is no limit: must be 0 or more", p.key, v)
			}
		}
		if p.review > p.repeat {
			return fmt.Errorf("limits.%s...: the limit for review (%g) must be the milder, that for repeat (%g) the harsher", p.key, p.review, p.repeat)
		}
	}
	if math.IsNaN(l.LowSNRSample) || math.IsInf(l.LowSNRSample, 0) {
		return fmt.Errorf("limits.low_snr_sample_review_db: %g is no limit: must be a number", l.LowSNRSample)
	}
	return nil
}
