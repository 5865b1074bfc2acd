package catalog

import (
	"context"
	"math"
)

// History is what the searched frames at an object's place say about its light,
// apart from the detections themselves. Unknown numbers are NaN.
type History struct {
	Searches int // searched frames that cover the place
	Before   int // of these, before the first detection
	Since    int // of these, after the last detection

	// LastMissed is the last searched frame before the first detection that
	// covers the place and has a known limit; nil if there is none.
	LastMissed *FrameRecord

	// Rise [mag/d] is the brightening from the first detection to the peak in
	// its filter, positive when it became brighter; NaN if the first one is the
	// brightest.
	Rise, RiseErr float64
	// RiseLimit [mag/d] is the least brightening before the first detection:
	// from the 5 sigma limit of the last frame of the same filter without one.
	// NaN where the limit is not fainter than the detection.
	RiseLimit float64
}

// SearchedAt lists the searched frames whose footprint covers a position [deg],
// by name. Frames without footprint are not among them.
func (s *Store) SearchedAt(ctx context.Context, ra, dec float64) ([]FrameRecord, error) {
	if err := (&Cone{RA: ra, Dec: dec}).check(); err != nil {
		return nil, err
	}
	list, err := s.frames(ctx, " WHERE status = 'searched' AND frame IN (SELECT frame FROM coverage WHERE tile = ?)", tileOf(ra, dec))
	if err != nil {
		return nil, err
	}
	kept := list[:0]
	for i := range list {
		if list[i].Covers(ra, dec) {
			kept = append(kept, list[i])
		}
	}
	return kept, nil
}

// History tells what was searched at an object's place and how its light came.
func (s *Store) History(ctx context.Context, o Object) (History, error) {
	frames, err := s.SearchedAt(ctx, o.RA, o.Dec)
	if err != nil {
		return History{}, err
	}
	members, err := s.Members(ctx, o)
	if err != nil {
		return History{}, err
	}
	return history(o, frames, members), nil
}

func history(o Object, frames []FrameRecord, members []Member) History {
	n := math.NaN()
	h := History{Searches: len(frames), Rise: n, RiseErr: n, RiseLimit: n}
	var first, peak *Member // of the first detection with a magnitude, in its filter
	for i := range members {
		m := &members[i]
		if math.IsNaN(m.Mag) || math.IsNaN(m.MidMJD) {
			continue
		}
		if first == nil {
			first, peak = m, m
		} else if m.Filter == first.Filter && m.Mag < peak.Mag {
			peak = m
		}
	}
	detected := map[string]bool{}
	for i := range members {
		detected[members[i].Frame] = true
	}
	var same *FrameRecord // the last missed one in the filter of the first
	for i := range frames {
		f := &frames[i]
		switch {
		case detected[f.Frame]:
		case f.MidMJD < o.FirstMJD:
			h.Before++
			if math.IsNaN(f.MagLimit5Sigma) {
				continue
			}
			if h.LastMissed == nil || f.MidMJD > h.LastMissed.MidMJD {
				h.LastMissed = f
			}
			if first != nil && f.Filter == first.Filter && (same == nil || f.MidMJD > same.MidMJD) {
				same = f
			}
		case f.MidMJD > o.LastMJD:
			h.Since++
		}
	}
	if first == nil {
		return h
	}
	if days := peak.MidMJD - first.MidMJD; days > 0 {
		h.Rise, h.RiseErr = (first.Mag-peak.Mag)/days, math.Hypot(first.MagErr, peak.MagErr)/days
	}
	// The first detection of all must be this one: an earlier one in another
	// filter or without a magnitude says that the light was there.
	if same != nil && first.MidMJD == o.FirstMJD && same.MagLimit5Sigma > first.Mag {
		h.RiseLimit = (same.MagLimit5Sigma - first.Mag) / (first.MidMJD - same.MidMJD)
	}
	return h
}
