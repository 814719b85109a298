package run

// ComparisonSchema is the name and number of a comparison's document.
const ComparisonSchema = "platen.comparison/1"

// Comparison compares conditions, quantity by quantity. A cell counts once,
// however many runs it had.
type Comparison struct {
	Schema     string               `json:"schema"`
	Conditions []string             `json:"conditions"`
	Quantities []QuantityComparison `json:"quantities"`
	Warnings   []string             `json:"warnings"`
	Software   Software             `json:"software"`
}

// QuantityComparison compares one quantity.
type QuantityComparison struct {
	Name        string             `json:"name"` // a field name of the cell's document, such as "tension_n_per_m"
	HeightRatio float64            `json:"height_ratio,omitempty"`
	FrequencyHz float64            `json:"frequency_hz,omitempty"`
	Conditions  []ConditionSummary `json:"conditions"`
	KruskalP    *float64           `json:"kruskal_wallis_p,omitempty"` // with three or more conditions
	Pairs       []Pair             `json:"pairs"`
}

// ConditionSummary describes the cells of one condition.
type ConditionSummary struct {
	Condition       string      `json:"condition"`
	Cells           int         `json:"cells"`
	Sessions        int         `json:"sessions"`
	Median          *float64    `json:"median,omitempty"`
	MedianLow       *float64    `json:"median_low,omitempty"` // 95 % interval from order statistics, from six cells on
	MedianHigh      *float64    `json:"median_high,omitempty"`
	BetweenCells    *float64    `json:"sd_between_cells,omitempty"`
	BetweenSessions *float64    `json:"sd_between_sessions,omitempty"`
	Pooled          *Interval95 `json:"pooled_mean,omitempty"` // hierarchical: cells differ, each is uncertain
	TrueSpread      *float64    `json:"sd_true_values,omitempty"`
	Outliers        []string    `json:"outliers,omitempty"` // marked, not removed
}

// Pair compares two conditions; differences are the second minus the first.
type Pair struct {
	First        string   `json:"first"`
	Second       string   `json:"second"`
	MannWhitneyP *float64 `json:"mann_whitney_p,omitempty"` // takes all cells for independent
	HolmP        *float64 `json:"mann_whitney_holm_p,omitempty"`
	Exact        bool     `json:"exact"`
	Shift        *Range95 `json:"hodges_lehmann_shift,omitempty"`
	PermutationP *float64 `json:"permutation_p,omitempty"`
	Within       bool     `json:"permuted_within_sessions"`
	Nested       *Range95 `json:"nested_difference,omitempty"` // cells nested in sessions
	NestedP      *float64 `json:"nested_p,omitempty"`
	NestedDoF    *float64 `json:"nested_dof,omitempty"`
	Sessions     *Range95 `json:"session_means_difference,omitempty"`
	CellsNeeded  int      `json:"cells_needed,omitempty"` // a condition, for 80 % power at the shift (or the difference asked for)
	Warnings     []string `json:"warnings,omitempty"`
}

// Range95 is a value with its 95 % interval, where there is one.
type Range95 struct {
	Value float64  `json:"value"`
	Low   *float64 `json:"low,omitempty"`
	High  *float64 `json:"high,omitempty"`
}
