package survey

import (
	"fmt"
	"math"
	"strconv"
)

// The columns of each table. The number of a column is its place in its list;
// the pose and the uncertainty stand together and in order, so that they can be
// read from the number of their first.
var (
	poseColumns  = []column{{name: "x_m"}, {name: "y_m"}, {name: "z_m"}, {name: "qx"}, {name: "qy"}, {name: "qz"}, {name: "qw"}}
	sigmaColumns = []column{{name: "sx_m"}, {name: "sy_m"}, {name: "sz_m"}, {name: "srx_rad"}, {name: "sry_rad"}, {name: "srz_rad"}}
	corrColumns  = correlationColumns()

	keyframeColumns = columns([]column{{name: "session"}, {name: "id"}, {name: "stamp_ns"}}, poseColumns)
	relativeColumns = columns([]column{{name: "session"}, {name: "from"}, {name: "to"}, {name: "kind"}},
		poseColumns, sigmaColumns, corrColumns)
	// What a row of a tie has to have besides depends on its kind.
	tieColumns = columns([]column{{name: "id"}, {name: "from_robot"}, {name: "from_session"}, {name: "from_key"}, {name: "from_stamp_ns", optional: true},
		{name: "to_robot"}, {name: "to_session"}, {name: "to_key"}, {name: "to_stamp_ns", optional: true}, {name: "kind"}},
		optional(poseColumns), optional(sigmaColumns), corrColumns, polarColumns,
		[]column{{name: "sensor", optional: true}, {name: "target", optional: true}, {name: "source", optional: true}, {name: "stamp_ns", optional: true}})
	truthColumns = columns([]column{{name: "robot"}, {name: "session"}, {name: "key"}, {name: "stamp_ns", optional: true}}, poseColumns)
)

const (
	keyframeSession, keyframeID, keyframeStamp, keyframePose = 0, 1, 2, 3

	relativeSession, relativeFrom, relativeTo, relativeKind, relativePose = 0, 1, 2, 3, 4

	relativeCov = relativePose + 7

	tieID, tieFromRobot, tieFromSession, tieFromKey, tieFromStamp = 0, 1, 2, 3, 4
	tieToRobot, tieToSession, tieToKey, tieToStamp, tieKind       = 5, 6, 7, 8, 9
	tiePose, tieCov, tiePolar                                     = 10, 17, 38
	tieSensor, tieTarget, tieSource, tieStamp                     = 44, 45, 46, 47

	truthRobot, truthSession, truthKey, truthStamp, truthPose = 0, 1, 2, 3, 4
)

var tieSightAt = sightAt{position: tiePose, positionSigma: tieCov, polar: tiePolar, polarSigma: tiePolar + 3,
	corr: [3]int{tieCov + 6 + sightCorr[0], tieCov + 6 + sightCorr[1], tieCov + 6 + sightCorr[2]}}

// optional returns the columns as such that may be absent.
func optional(all []column) []column {
	out := append([]column(nil), all...)
	for i := range out {
		out[i].optional = true
	}
	return out
}

func columns(parts ...[]column) []column {
	var all []column
	for _, p := range parts {
		all = append(all, p...)
	}
	return all
}

func correlationColumns() []column {
	var all []column
	for i := range 6 {
		for j := i + 1; j < 6; j++ {
			all = append(all, column{name: "c_" + componentNames[i] + "_" + componentNames[j], optional: true})
		}
	}
	return all
}

// pose reads the seven columns from c on. The quaternion must be unit within
// quatTol and is returned as it stands.
func (t *table) pose(c, dim int) (p Pose) {
	for i := range 3 {
		v, ok := t.float(c + i)
		if ok && math.Abs(v) > maxMetres {
			t.faultAt(c+i, strconv.FormatFloat(v, 'g', -1, 64), fmt.Sprintf("at most %g m either way", float64(maxMetres)))
		}
		p.T[i] = v
	}
	whole := true
	for i := range 4 {
		v, ok := t.float(c + 3 + i)
		p.Q[i] = v
		whole = whole && ok
	}
	if whole {
		if norm := quatNorm(p.Q); !(math.Abs(norm-1) <= quatTol) {
			t.fault("qx..qw", fmt.Sprintf("a quaternion of norm %.9g", norm), fmt.Sprintf("1 within %g", quatTol))
		}
	}
	if dim == 2 && !p.Planar() {
		for i, v := range [3]float64{p.T[2], p.Q[0], p.Q[1]} {
			if v != 0 {
				t.faultAt(c+2+i, strconv.FormatFloat(v, 'g', -1, 64), "0 in a survey of dimension 2")
			}
		}
	}
	return p
}

func quatNorm(q [4]float64) float64 {
	return math.Sqrt(q[0]*q[0] + q[1]*q[1] + q[2]*q[2] + q[3]*q[3])
}

// cov reads the six sigmas and fifteen correlations from column c on.
func (t *table) cov(c int) (v Cov) {
	sound := true
	for i := range 6 {
		s, ok := t.sigma(c+i, true)
		v.Sigma[i] = s
		sound = sound && ok
	}
	correlated := false
	k := 0
	for i := range 6 {
		for j := i + 1; j < 6; j, k = j+1, k+1 {
			if len(t.text(c+6+k)) == 0 {
				continue // absent means none
			}
			r, ok := t.correlation(c+6+k, v.Sigma[i], v.Sigma[j])
			v.Corr[k] = r
			sound = sound && ok
			correlated = correlated || r != 0
		}
	}
	if sound && correlated {
		if err := v.checkCorrelation(); err != nil {
			t.fault("c_x_y..c_ry_rz", err.Error(), "one that is positive definite")
		}
	}
	return v
}

var sigmaRule = fmt.Sprintf("a number from %g to %g", minSigma, maxSigma)

// sigma reads a standard deviation and reports whether it is one.
func (t *table) sigma(c int, mayBeInf bool) (float64, bool) {
	f := t.text(c)
	s, ok := parseFloat(f)
	switch {
	case mayBeInf && (string(f) == "inf" || string(f) == "+inf" || string(f) == "Inf" || string(f) == "+Inf"):
		return math.Inf(1), true
	case ok && minSigma <= s && s <= maxSigma:
		return s, true
	case mayBeInf:
		t.faultAt(c, t.shown(c), sigmaRule+", or inf for a component that was not measured")
	default:
		t.faultAt(c, t.shown(c), sigmaRule)
	}
	return s, false
}

// correlation reads the correlation of two components with the given sigmas and reports whether it is one.
func (t *table) correlation(c int, si, sj float64) (float64, bool) {
	r, ok := t.float(c)
	switch {
	case !ok:
	case math.Abs(r) > 1:
		t.faultAt(c, strconv.FormatFloat(r, 'g', -1, 64), "a correlation from -1 to 1")
		ok = false
	case r != 0 && (math.IsInf(si, 1) || math.IsInf(sj, 1)):
		t.faultAt(c, strconv.FormatFloat(r, 'g', -1, 64), "0 where a sigma is inf")
		ok = false
	}
	return r, ok
}
