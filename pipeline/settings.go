package pipeline

import (
	"fmt"
	"math"
	"time"

	"platen/pipeline/calib"
)

// Settings are the choices of the analysis. The zero value is not usable:
// start from Defaults. Names carry the unit that the settings file uses.
type Settings struct {
	// Spring constant of the force sensor where the run's header gives none.
	// 0 (default): not known; a run that exports deflection only cannot then
	// be read, and a run that exports force gets no uncertainty from it.
	SpringConstantNPerM  float64 `toml:"spring_constant_n_per_m"`
	SpringConstantUNPerM float64 `toml:"spring_constant_u_n_per_m"`

	// Deflection sensitivity where the run's header gives none; 0: not known.
	SensitivityNmPerV  float64 `toml:"sensitivity_nm_per_v"`
	SensitivityUNmPerV float64 `toml:"sensitivity_u_nm_per_v"`

	// SmallestMoveNm is the smallest change of height taken for a move of the
	// plate. Default 10 nm: well below the amplitudes in use (50 nm and more)
	// and above what a good height sensor scatters. Where the height scatters
	// more than a sixth of it, six times the scatter is used instead.
	SmallestMoveNm float64 `toml:"smallest_move_nm"`

	// SlowestRampNmPerS parts a ramp from the creep of a hold. Default
	// 50 nm/s: approaches run at 500 nm/s and more, creep at a few nm/s.
	SlowestRampNmPerS float64 `toml:"slowest_ramp_nm_per_s"`

	// HeightOffsetUNm is the standard uncertainty of the zero of the height
	// (common practice, no source: touching down on glass repeats to some
	// tens of nanometres). Default 30 nm.
	HeightOffsetUNm float64 `toml:"height_offset_u_nm"`

	// ImagedRadiusUPercent is the standard uncertainty, common to all images,
	// of the scale of the imaged radius: pixel size and where the outline is
	// put (common practice, no source). Default 0.3 %.
	ImagedRadiusUPercent float64 `toml:"imaged_radius_u_percent"`

	// ContactRadiusUPercent is the model part of the uncertainty of a radius
	// read off the first contact; a cell is not a perfect sphere and touches
	// with its bumps first (common practice, no source). Default 1 %.
	ContactRadiusUPercent float64 `toml:"contact_radius_u_percent"`

	// ZeroForceUPN is the standard uncertainty of the force zero of a run in
	// which the plate is never free of the cell. Default 50 pN.
	ZeroForceUPN float64 `toml:"zero_force_u_pn"`

	// DriftPriorPNPerS says how fast the baseline of a healthy rig may drift
	// (one standard deviation about zero); it keeps a short stretch before
	// contact from inventing a steep drift. Default 5 pN/s.
	DriftPriorPNPerS float64 `toml:"drift_prior_pn_per_s"`

	// ThermalFactor is the share of kT/k that the first mode shows in a thermal
	// run: 0.817 (default) for a sensor that reads the slope of the beam's end
	// and was calibrated by pressing on a hard surface, 0.971 for one that
	// reads deflection.
	ThermalFactor float64 `toml:"thermal_factor"`

	// TemperatureC and its uncertainty, where a thermal run names none.
	// Defaults 25 and 2 degrees Celsius.
	TemperatureC  float64 `toml:"temperature_c"`
	TemperatureUC float64 `toml:"temperature_u_c"`

	// TimeZone is the zone (IANA name, such as "Europe/Lisbon") of start times
	// that an exporter writes without one. Default "": that of this computer.
	TimeZone string `toml:"time_zone"`
}

// absoluteZeroC turns degrees Celsius into kelvin.
const absoluteZeroC = 273.15

// zone returns the time zone of start times written without one.
func (s Settings) zone() *time.Location {
	if s.TimeZone == "" {
		return time.Local
	}
	if z, err := time.LoadLocation(s.TimeZone); err == nil {
		return z
	}
	return time.UTC // Validate has refused it
}

// Defaults returns the settings in force where the user gives none.
func Defaults() Settings {
	return Settings{
		SmallestMoveNm:        10,
		SlowestRampNmPerS:     50,
		HeightOffsetUNm:       30,
		ImagedRadiusUPercent:  0.3,
		ContactRadiusUPercent: 1,
		ZeroForceUPN:          50,
		DriftPriorPNPerS:      5,
		ThermalFactor:         math.Round(1e4*calib.FactorSlope) / 1e4,
		TemperatureC:          25,
		TemperatureUC:         2,
	}
}

// Validate reports the first setting that makes no sense, with its allowed
// range.
func (s Settings) Validate() error {
	for _, c := range []struct {
		key        string
		v, min     float64
		allowEqual bool
	}{
		{"spring_constant_n_per_m", s.SpringConstantNPerM, 0, true},
		{"spring_constant_u_n_per_m", s.SpringConstantUNPerM, 0, true},
		{"sensitivity_nm_per_v", s.SensitivityNmPerV, 0, true},
		{"sensitivity_u_nm_per_v", s.SensitivityUNmPerV, 0, true},
		{"smallest_move_nm", s.SmallestMoveNm, 0, false},
		{"slowest_ramp_nm_per_s", s.SlowestRampNmPerS, 0, false},
		{"height_offset_u_nm", s.HeightOffsetUNm, 0, true},
		{"imaged_radius_u_percent", s.ImagedRadiusUPercent, 0, true},
		{"contact_radius_u_percent", s.ContactRadiusUPercent, 0, true},
		{"zero_force_u_pn", s.ZeroForceUPN, 0, true},
		{"drift_prior_pn_per_s", s.DriftPriorPNPerS, 0, false},
		{"thermal_factor", s.ThermalFactor, 0, false},
		{"temperature_c", s.TemperatureC + absoluteZeroC, 0, false},
		{"temperature_u_c", s.TemperatureUC, 0, true},
	} {
		if math.IsNaN(c.v) || math.IsInf(c.v, 0) || c.v < c.min || (c.v == c.min && !c.allowEqual) {
			want := "0 or more"
			if !c.allowEqual {
				want = "more than 0"
			}
			return fmt.Errorf("analysis.%s = %g: must be %s", c.key, c.v, want)
		}
	}
	if _, err := time.LoadLocation(s.TimeZone); err != nil {
		return fmt.Errorf("analysis.time_zone = %q: must be an IANA zone name such as \"Europe/Lisbon\", or empty for that of this computer", s.TimeZone)
	}
	return nil
}
