package healpix

import "math"

// Range holds the numbers From to To-1.
type Range struct{ From, To int64 }

// Within lists, as sorted ranges, the pixels of an order whose centre lies
// within an outline: corners [deg] around it, joined by great circles. Seen from
// the mean direction of its corners, the outline must be visible as a whole and
// less than 90 degrees away; that of a camera is. An outline of fewer than three
// corners holds nothing.
//
// The outline is cut into triangles about that direction. Pixels are divided as
// long as the circle around them touches the outline.
func Within(order int, outline [][2]float64) []Range {
	check(order)
	if len(outline) < 3 {
		return nil
	}
	f := finder{order: order}
	corners := make([]vector, len(outline))
	var middle vector
	for i, p := range outline {
		corners[i] = direction(p[0], p[1])
		for k := range middle {
			middle[k] += corners[i][k]
		}
	}
	middle = normal(middle)
	turn := 0.0
	for i := range corners {
		turn += dot(middle, cross(corners[i], corners[(i+1)%len(corners)]))
	}
	for i := range corners {
		a, b := corners[i], corners[(i+1)%len(corners)]
		if turn < 0 {
			a, b = b, a
		}
		edge := cross(a, b)
		if dot(edge, edge) == 0 {
			continue // a corner twice
		}
		f.triangles = append(f.triangles, [3]vector{normal(edge), normal(cross(b, middle)), normal(cross(middle, a))})
	}
	for face := range Pixels(0) {
		f.visit(0, face)
	}
	return f.found
}

type vector = [3]float64

type finder struct {
	order     int
	triangles [][3]vector // inward normals of the edges; the first is that of the outline
	found     []Range
}

// rounding lets a centre on the edge between two triangles be in one of them.
const rounding = 1e-15

func (f *finder) visit(order int, pixel int64) {
	centre := direction(Centre(order, pixel))
	reach := 0.0
	if order < f.order {
		reach = math.Sin(radius(order))
	}
	inside, touched := false, false
	for i := range f.triangles {
		n := &f.triangles[i]
		outer, left, right := dot(n[0], centre), dot(n[1], centre), dot(n[2], centre)
		inside = inside || min(outer, left, right) >= -rounding
		touched = touched || math.Abs(outer) <= reach && min(left, right) >= -reach
	}
	if order == f.order || !touched {
		if inside {
			shift := 2 * (f.order - order)
			f.add(Range{pixel << shift, (pixel + 1) << shift})
		}
		return
	}
	for child := range int64(4) {
		f.visit(order+1, 4*pixel+child)
	}
}

func (f *finder) add(r Range) {
	if n := len(f.found); n > 0 && f.found[n-1].To == r.From {
		f.found[n-1].To = r.To
		return
	}
	f.found = append(f.found, r)
}

// radius bounds the angle [rad] from a pixel's centre to its farthest corner: at
// any order it is less than 0.681 times a quarter turn over the pixels along
// the side of a face.
func radius(order int) float64 { return 0.69 * math.Pi / 2 / float64(int64(1)<<order) }

func direction(ra, dec float64) vector {
	sa, ca := math.Sincos(ra * math.Pi / 180)
	sd, cd := math.Sincos(dec * math.Pi / 180)
	return vector{cd * ca, cd * sa, sd}
}

func dot(a, b vector) float64 { return a[0]*b[0] + a[1]*b[1] + a[2]*b[2] }

func cross(a, b vector) vector {
	return vector{a[1]*b[2] - a[2]*b[1], a[2]*b[0] - a[0]*b[2], a[0]*b[1] - a[1]*b[0]}
}

func normal(a vector) vector {
	r := math.Sqrt(dot(a, a))
	return vector{a[0] / r, a[1] / r, a[2] / r}
}
