package run

// CellSchema is the name and number of a cell's document.
const CellSchema = "platen.cell/1"

// CellResult is what all runs of one cell tell together. It is a pure function
// of the runs' documents, the settings and the version; each new run revises
// it.
type CellResult struct {
	Schema    string   `json:"schema"`
	Cell      string   `json:"cell"`
	Session   string   `json:"session,omitempty"`
	Condition string   `json:"condition,omitempty"`
	Runs      []string `json:"runs"`               // ids of the runs used, by start
	LeftOut   []string `json:"left_out,omitempty"` // ids of runs to repeat, which are not used
	StartedAt string   `json:"started,omitempty"`  // of the first run used

	TensionNPerM  *Quantity `json:"tension_n_per_m,omitempty"` // at the lowest height, see TensionRatio
	TensionRatio  *Quantity `json:"tension_height_ratio,omitempty"`
	SphereRadiusM *Quantity `json:"sphere_radius_m,omitempty"`

	Effective       []EffectiveModulus `json:"effective"`        // by height and frequency, repeats joined
	Moduli          []SheetModuli      `json:"moduli"`           // by frequency
	FrequencyModels []FrequencySerie   `json:"frequency_models"` // by height
	Crossover       *Crossover         `json:"crossover_s,omitempty"`
	Relaxation      []Relaxation       `json:"relaxation,omitempty"`

	Findings []Finding `json:"findings"`
	Advice   string    `json:"advice"`
	Enough   bool      `json:"enough"` // no further run is advised
	Software Software  `json:"software"`
}

// EffectiveModulus is the effective area modulus at one height and frequency;
// U is all of its uncertainty, the common part included.
type EffectiveModulus struct {
	HeightRatio  float64   `json:"height_ratio"`
	FrequencyHz  float64   `json:"frequency_hz"`
	StorageNPerM *Quantity `json:"storage_n_per_m,omitempty"`
	LossNPerM    *Quantity `json:"loss_n_per_m,omitempty"`
	Runs         int       `json:"runs"`
}

// SheetModuli are the moduli of the cortex as a sheet at one frequency, from
// the effective modulus at several heights.
type SheetModuli struct {
	FrequencyHz         float64     `json:"frequency_hz"`
	Heights             int         `json:"heights"`
	BulkStorageNPerM    *Quantity   `json:"bulk_storage_n_per_m,omitempty"`
	BulkLossNPerM       *Quantity   `json:"bulk_loss_n_per_m,omitempty"`
	ShearStorageNPerM   *Quantity   `json:"shear_storage_n_per_m,omitempty"`
	ShearLossNPerM      *Quantity   `json:"shear_loss_n_per_m,omitempty"`
	PoissonRatio        *Interval95 `json:"poisson_ratio,omitempty"`
	PoissonRatioOther   *Interval95 `json:"poisson_ratio_other_plates,omitempty"` // were the cell stuck to the plates, or, where stuck is the setting, free
	Resolved            bool        `json:"resolved"`
	DominantUncertainty string      `json:"dominant_uncertainty,omitempty"`
	ResidualProbability *float64    `json:"residual_p,omitempty"` // that noise alone leaves residuals this large
	Why                 string      `json:"why,omitempty"`        // why there is no answer, or what would sharpen it
}

// Interval95 is a value with its standard uncertainty and 95 % interval. An
// open end says that the data set no bound there.
type Interval95 struct {
	Value    float64 `json:"value"`
	U        float64 `json:"u"`
	Low      float64 `json:"low"`
	High     float64 `json:"high"`
	OpenLow  bool    `json:"open_low,omitempty"`
	OpenHigh bool    `json:"open_high,omitempty"`
}

// FrequencySerie is the frequency series of a cell at one height.
type FrequencySerie struct {
	HeightRatio   float64      `json:"height_ratio"`
	Frequencies   int          `json:"frequencies"`
	Models        []ModelFit   `json:"models"`  // best first
	Decided       bool         `json:"decided"` // the best model stands out
	KramersKronig *Consistency `json:"kramers_kronig,omitempty"`
	Why           string       `json:"why,omitempty"`
}

// ModelFit is one model fitted to a frequency series.
type ModelFit struct {
	Model         string      `json:"model"`
	Parameters    []Parameter `json:"parameters"`
	AICc          float64     `json:"aicc"`
	EvidenceRatio float64     `json:"evidence_ratio"` // of the best model over this one
	ChiSquared    float64     `json:"chi_squared"`
	Freedom       int         `json:"freedom"`
}

// Parameter is a fitted parameter; U is from the fit, Low and High are the
// 95 % interval of a bootstrap.
type Parameter struct {
	Name  string   `json:"name"`
	Unit  string   `json:"unit"`
	Value float64  `json:"value"`
	U     *float64 `json:"u,omitempty"`
	Low   *float64 `json:"low,omitempty"`
	High  *float64 `json:"high,omitempty"`
}

// Consistency is the outcome of the Kramers–Kronig check.
type Consistency struct {
	ChiSquared float64 `json:"chi_squared"`
	Freedom    int     `json:"freedom"`
	P          float64 `json:"p"`
	Consistent bool    `json:"consistent"`
}

// Crossover is the time at which storage and loss modulus are equal, or the
// bound that the data give.
type Crossover struct {
	Value *float64 `json:"value,omitempty"`
	Low   *float64 `json:"low,omitempty"`  // 95 % interval; alone: longer than this
	High  *float64 `json:"high,omitempty"` // alone: shorter than this
	Model string   `json:"model,omitempty"`
}

// Relaxation is the decay of the tension while the plate stood after a move.
type Relaxation struct {
	Run         string  `json:"run"`
	Segment     int     `json:"segment"`
	HeightRatio float64 `json:"height_ratio"`
	Decay
}

// Decay is a law fitted to the tension after a step: exponential, stretched
// exponential, or power law.
type Decay struct {
	Law           string   `json:"law"`
	PlateauNPerM  float64  `json:"plateau_n_per_m"`
	DropNPerM     float64  `json:"drop_n_per_m"` // above the plateau at the start of the hold
	TimeS         float64  `json:"time_s"`
	Exponent      float64  `json:"exponent"`
	EvidenceRatio *float64 `json:"evidence_ratio,omitempty"` // over the next best law
	Settled       bool     `json:"settled"`                  // holding as long again would change the tension by less than 2 %
}
