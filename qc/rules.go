package qc

import "fmt"

// Rule describes one rule: for the README, for platen preflight, and for
// whoever asks why a run was not accepted.
type Rule struct {
	Name     string
	What     string // what is compared with the limit
	Unit     string
	Limits   string // the default limits
	Reason   string // why the defaults are what they are
	Advice   string // the advice shown, in short
	WhileRun bool   // may fire while the run is being written
	Cell     bool   // only where there is a cell
}

// ruling is a rule with the function that applies it.
type ruling struct {
	Rule
	judge func(*court)
}

// Rules returns the rules with their default limits, in the order in which
// they are applied.
func Rules() []Rule {
	out := make([]Rule, len(table))
	for i, r := range table {
		out[i] = r.Rule
	}
	return out
}

// table lists every rule, causes before what they bring about: of two equally
// grave findings the first is shown first. To add one: write its function in the file of its
// kind (signal.go, cell.go, record.go), give its limits in limits.go, and add
// its line here; the README's table is checked against this one.
var table = []ruling{
	{Rule{
		Name: "unreadable", What: "bytes that cannot be read as a run", Unit: "",
		Limits:   "repeat where a run's columns were recognised, else review",
		Reason:   "nothing is dropped silently",
		Advice:   "as the message says",
		WhileRun: true,
	}, judgeUnreadable},
	{Rule{
		Name: "truncated", What: "declared samples that are missing at the end", Unit: "%",
		Limits: "review any, repeat above 20",
		Reason: "what is there is analysed; a fifth missing usually lacks the oscillation",
		Advice: "see whether the export was stopped",
	}, judgeTruncated},
	{Rule{
		Name: "thermal-fit", What: "whether a thermal run gives a spring constant; scatter about the fitted spectrum over what noise allows", Unit: "1",
		Limits: "repeat without one, review above 2",
		Reason: "a peak outside the band, aliased, or not that of one free beam gives a wrong spring constant, and with it wrong tensions",
		Advice: "record the free sensor again, longer or faster sampled",
	}, judgeThermal},
	{Rule{
		Name: "time-order", What: "time stamps that step back beyond their rounding", Unit: "steps",
		Limits:   "review any, repeat above 3",
		Reason:   "rows out of order, or written twice, cannot be told from a real movement",
		Advice:   "export the run again",
		WhileRun: true,
	}, judgeTimeOrder},
	{Rule{
		Name: "sample-gap", What: "time missing between samples", Unit: "ms",
		Limits:   "review 20, repeat 2000",
		Reason:   "a few lost samples hurt nothing and are noted; 20 ms is a fiftieth of a usual cycle",
		Advice:   "close other programs on the instrument's computer",
		WhileRun: true,
	}, judgeSampleGap},
	{Rule{
		Name: "clipping", What: "samples of the force that stand still at its extreme", Unit: "%",
		Limits:   "review any, repeat above 0.1",
		Reason:   "ten or more equal extreme samples in a row are a saturated sensor or amplifier, not noise",
		Advice:   "lower the gain or the load",
		WhileRun: true,
	}, judgeClipping},
	{Rule{
		Name: "no-contact", What: "whether the plate touched a cell at all", Unit: "",
		Limits:   "repeat",
		Reason:   "without contact there is nothing to analyse; where the run starts in contact, the zero of the force is taken as exported and this is noted",
		Advice:   "find the cell; start the approach higher or go lower",
		WhileRun: true, Cell: true,
	}, judgeNoContact},
	{Rule{
		Name: "contact-loss", What: "time without force though the plate is down on the cell", Unit: "s",
		Limits:   "repeat above 0.5",
		Reason:   "the cell has moved out from under the plate, or burst",
		Advice:   "find the cell again; repeat from the approach",
		WhileRun: true, Cell: true,
	}, judgeContactLoss},
	{Rule{
		Name: "adhesion", What: "pull on the plate as it leaves the cell, over the largest load", Unit: "%",
		Limits:   "review 5, repeat 20, never below 100 pN",
		Reason:   "the shape model has no adhesion: a cell that sticks has a larger contact than computed",
		Advice:   "coat the plate afresh; repeat on a fresh cell",
		WhileRun: true, Cell: true,
	}, judgeAdhesion},
	{Rule{
		Name: "force-drift", What: "slope of the force while the plate is free of the cell", Unit: "pN/s",
		Limits:   "review 5, repeat 20",
		Reason:   "5 pN/s moves the zero by 0.3 nN in a minute, some per cent of a usual load; a straight drift is taken out, but one this fast is seldom straight",
		Advice:   "let the sensor settle, then repeat",
		WhileRun: true,
	}, judgeForceDrift},
	{Rule{
		Name: "volume-change", What: "imaged volume against that of the first images", Unit: "%",
		Limits:   "review 4, repeat 8",
		Reason:   "a cell that is only squeezed keeps its volume (the model rests on it); 4 % of volume is 1.3 % of diameter and some 10 % of modulus",
		Advice:   "check medium and osmolarity; take a fresh cell",
		WhileRun: true, Cell: true,
	}, judgeVolumeChange},
	{Rule{
		Name: "volume-disagreement", What: "difference of the volumes from two sources (images, declared diameter, first contact)", Unit: "%",
		Limits:   "review 5, beyond twice the joint uncertainty",
		Reason:   "the tension goes with about the fourth power of the diameter; sources that disagree mean a wrong scale, a wrong cell, or a wrong zero of height",
		Advice:   "check pixel size, declared diameter and the zero of the height",
		WhileRun: true, Cell: true,
	}, judgeVolumeDisagreement},
	{Rule{
		Name: "height-drift", What: "slope of the height while the plate should stand or oscillate about one height", Unit: "nm/s",
		Limits:   "review 10, repeat 40",
		Reason:   "10 nm/s over a segment of 12 s is 1 % of a usual height, as much as the oscillation itself strains the cell",
		Advice:   "check the plate's feedback and the temperature",
		WhileRun: true, Cell: true,
	}, judgeHeightDrift},
	{Rule{
		Name: "tension-drift", What: "slope of the tension over its mean, during oscillation (during a hold it is only noted)", Unit: "%/min",
		Limits:   "review 20, repeat 60",
		Reason:   "at 20 % a minute the tension changes by 4 % within 12 cycles at 1 Hz: more than the modulus is worth knowing",
		Advice:   "wait until the tension is steady; if it keeps falling the cell is failing",
		WhileRun: true, Cell: true,
	}, judgeTensionDrift},
	{Rule{
		Name: "low-snr", What: "modulus over its scatter from cycle to cycle, 20 log10", Unit: "dB",
		Limits:   "review below 30, repeat below 20; review below 6 for single samples (snr_db)",
		Reason:   "30 dB is a modulus known to 3 %, and so a loss part of a usual third of it known to 10 %; 20 dB is three times as wide",
		Advice:   "larger amplitude or more cycles",
		WhileRun: true, Cell: true,
	}, judgeLowSNR},
	{Rule{
		Name: "strain-range", What: "amplitude of the area strain", Unit: "%",
		Limits:   "review below 0.05 or above 3, repeat above 6",
		Reason:   "a bare membrane ruptures at 3 to 5 % (BioNumbers 110907); small strains drown in the noise of the height",
		Advice:   "change the amplitude",
		WhileRun: true, Cell: true,
	}, judgeStrainRange},
	{Rule{
		Name: "distortion", What: "harmonics 2 and 3 of the tension over the fundamental", Unit: "%",
		Limits:   "review 10, repeat 25",
		Reason:   "a storage and a loss modulus describe a linear answer; 10 % of harmonics is a visibly bent loop",
		Advice:   "smaller amplitude; look for partial contact",
		WhileRun: true, Cell: true,
	}, judgeDistortion},
	{Rule{
		Name: "phase-range", What: "phase of tension against area strain", Unit: "deg",
		Limits:   "review outside 0 to 90",
		Reason:   "a passive material neither answers before it is strained nor gives back more than it takes",
		Advice:   "check signs, the drag of the medium and the lag between the channels",
		WhileRun: true, Cell: true,
	}, judgePhaseRange},
	{Rule{
		Name: "few-cycles", What: "cycles of an oscillation that is over", Unit: "cycles",
		Limits:   "review below 3",
		Reason:   "below three cycles there is no honest scatter from cycle to cycle",
		Advice:   "record more cycles",
		WhileRun: true, Cell: true,
	}, judgeFewCycles},
}

func percent(x float64) string { return fmt.Sprintf("%.2g %%", 100*x) }
