package catalog

import (
	"context"
	"fmt"
	"math"

	"nightsift/internal/healpix"
	"nightsift/internal/moc"
)

// CoverageQuery says of which searched frames to make a map. The zero value of
// a filter lets all pass.
type CoverageQuery struct {
	Night, Filter, Field string
	DeeperThan           float64 // mag: least MagLimit5Sigma; 0 also takes frames without a known limit
	Order                int     // of the smallest pixels: 0 to healpix.MaxOrder
}

// Coverage is what was searched.
type Coverage struct {
	Map                 moc.MOC
	Frames              int     // in the map
	Footless            int     // searched frames left out because their footprint is unknown
	Shallowest, Deepest float64 // mag: limits of the frames; NaN without a known one
}

// Coverage maps the searched frames: the pixels whose centre is on one of them,
// so that the area of the map is without bias.
func (s *Store) Coverage(ctx context.Context, q CoverageQuery) (*Coverage, error) {
	if q.Order < 0 || q.Order > healpix.MaxOrder {
		return nil, fmt.Errorf("coverage: order %d: expected 0 to %d", q.Order, healpix.MaxOrder)
	}
	frames, err := s.Frames(ctx, FrameQuery{Night: q.Night, Field: q.Field, Status: Searched})
	if err != nil {
		return nil, err
	}
	c := &Coverage{Map: moc.MOC{Order: q.Order}, Shallowest: math.NaN(), Deepest: math.NaN()}
	var pixels []healpix.Range
	for i := range frames {
		f := &frames[i]
		if q.Filter != "" && f.Filter != q.Filter || q.DeeperThan != 0 && !(f.MagLimit5Sigma >= q.DeeperThan) {
			continue
		}
		if _, _, ok := circle(f.Footprint); !ok {
			c.Footless++
			continue
		}
		c.Frames++
		if limit := f.MagLimit5Sigma; !math.IsNaN(limit) {
			if !(c.Shallowest <= limit) {
				c.Shallowest = limit
			}
			if !(c.Deepest >= limit) {
				c.Deepest = limit
			}
		}
		pixels = append(pixels, healpix.Within(q.Order, f.Footprint)...)
	}
	c.Map.Add(pixels)
	return c, nil
}
