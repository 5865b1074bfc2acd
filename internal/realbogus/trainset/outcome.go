package trainset

import (
	"fmt"

	"nightsift/internal/realbogus"
)

// Outcome is a trained model with everything that was measured of it.
type Outcome struct {
	Model   *realbogus.Model
	Judged  []realbogus.Judged // by models that have not seen the frame
	Stamps  [][]byte           // of each of Judged; nil without
	InUse   *realbogus.Metrics // of the model in use on the same examples, its calibration fitted anew
	ByField *realbogus.Metrics // by models that have not seen the field; nil with fewer than two fields

	Importance []realbogus.Weighed
}

// Better reports whether the new model is at least as good as the one in use:
// whether its log loss on held-out frames is not above that of the other.
func (o *Outcome) Better() bool { return o.Model.Metrics.LogLoss <= o.InUse.LogLoss }

// Learn trains on a survey's own frames and compares with the model in use.
func Learn(own *Own, inUse *realbogus.Model, cfg realbogus.TrainConfig) (*Outcome, error) {
	cfg.Shift = own.Shift
	o := &Outcome{}
	var err error
	if o.Model, o.Judged, err = realbogus.TrainJudged(own.Examples, cfg); err != nil {
		return nil, err
	}
	// Judged are the examples of some weight, in order.
	var kept []realbogus.Example
	var fields []string
	for i, e := range own.Examples {
		if e.Weight > 0 {
			kept, fields = append(kept, e), append(fields, own.Fields[i])
			o.Stamps = append(o.Stamps, own.Stamps[i])
		}
	}
	if len(kept) != len(o.Judged) {
		return nil, fmt.Errorf("train: %d examples were judged, expected %d", len(o.Judged), len(kept))
	}
	o.InUse = realbogus.Measure(realbogus.Rejudge(inUse, kept, cfg))
	if o.Importance, err = realbogus.Importance(kept, cfg); err != nil {
		return nil, err
	}
	several := map[string]bool{}
	for _, f := range fields {
		several[f] = true
	}
	if len(several) > 1 {
		byField := make([]realbogus.Example, len(kept))
		for i := range kept {
			byField[i] = kept[i]
			byField[i].Group = "field " + fields[i]
			byField[i].Features.Clean()
		}
		// A field may hold all of a class: then there is nothing to compare.
		if judged, err := realbogus.HoldOut(byField, cfg); err == nil {
			o.ByField = realbogus.Measure(judged)
		}
	}
	return o, nil
}
