package survey

import (
	"fmt"
	"strings"

	"gonum.org/v1/gonum/mat"
)

// Columns of the pose tables.
var (
	tablePoseColumns     = []column{{name: "x"}, {name: "y"}, {name: "z"}, {name: "qx"}, {name: "qy"}, {name: "qz"}, {name: "qw"}}
	tableKeyframeColumns = columns([]column{{name: "id"}}, tablePoseColumns)
	tableRelativeColumns = columns([]column{{name: "from"}, {name: "to"}}, tablePoseColumns, informationColumns())
)

const (
	tableKeyframeID, tableKeyframePose                                   = 0, 1
	tableRelativeFrom, tableRelativeTo, tableRelativePose, tableInfoFrom = 0, 1, 2, 9
)

func informationColumns() []column {
	var all []column
	for i := range 6 {
		for j := i; j < 6; j++ {
			all = append(all, column{name: fmt.Sprintf("i%d%d", i, j)})
		}
	}
	return all
}

// ReadPoseTables reads a pose graph from two tables in dir, gzipped or not:
//
//	keyframes.csv  id, x, y, z, qx, qy, qz, qw
//	relative.csv   from, to, x, y, z, qx, qy, qz, qw, i00, i01 ... i55
//
// with the upper triangle of the information matrix row by row, translation
// first. It becomes the only session of the only robot, r1. A measurement from
// an id to the next is odometry, any other a loop closure. The dimension is 2
// when no pose leaves the plane and no information matrix has an entry for z,
// rx or ry.
//
// The smallest eigenvalue of an information matrix must be at least -1e-9 of
// the largest; and as it has to be written as sigmas and correlations, it must
// be positive definite on the components with a row that is not zero.
func ReadPoseTables(dir string) (*Survey, error) {
	r := &reader{root: dir, keys: make(map[string]map[key]bool)}
	robot := Robot{ID: "r1"}
	planar := true
	if err := r.tableKeyframes(&robot, &planar); err != nil {
		return nil, err
	}
	if err := r.tableRelatives(&robot, &planar); err != nil {
		return nil, err
	}
	if err := r.sink.err(); err != nil {
		return nil, err
	}
	dim := 3
	if planar {
		dim = 2
	}
	return &Survey{
		Meta: Meta{
			Format:    formatVersion,
			Name:      "imported pose tables",
			Dimension: dim,
			Datum:     Datum{Name: "first session"},
			Robots:    []RobotMeta{{ID: robot.ID, Sessions: []uint32{tableSession}}},
		},
		Robots:   []Robot{robot},
		Warnings: r.sink.warnings,
	}, nil
}

// tableSession is the session that pose tables become.
const tableSession = 1

func (r *reader) tableKeyframes(robot *Robot, planar *bool) error {
	seen := make(map[key]bool)
	unnamed := false
	whole, err := r.rows(keyframesName, tableKeyframeColumns, false, func(t *table) {
		id, ok := t.int64(tableKeyframeID)
		at := key{tableSession, id}
		if ok && seen[at] {
			t.faultAt(tableKeyframeID, fmt.Sprintf("%d a second time", id), "each id once")
		}
		seen[at] = true
		unnamed = unnamed || !ok
		k := Keyframe{Session: tableSession, ID: id, Pose: t.pose(tableKeyframePose, 3)}
		*planar = *planar && k.Pose.Planar()
		if !t.bad {
			robot.Keyframes = append(robot.Keyframes, k)
		}
	})
	if !whole || unnamed {
		seen = nil
	}
	r.keys[robot.ID] = seen
	return err
}

func (r *reader) tableRelatives(robot *Robot, planar *bool) error {
	_, err := r.rows(relativeName, tableRelativeColumns, false, func(t *table) {
		m := Relative{Session: tableSession, Kind: Closure}
		m.From, m.To = t.ends(tableRelativeFrom, tableRelativeTo, func(c int, id int64) {
			r.keyframe(t, c, robot.ID, tableSession, id)
		})
		if m.To == m.From+1 {
			m.Kind = Odometry
		}
		m.Pose = t.pose(tableRelativePose, 3)
		info, ok := t.information(tableInfoFrom)
		if ok {
			m.Cov = t.covFromInformation(&info)
		}
		*planar = *planar && m.Pose.Planar() && planarInformation(&info)
		if !t.bad {
			robot.Relatives = append(robot.Relatives, m)
		}
	})
	return err
}

// information reads the 21 columns from c on into a symmetric matrix and
// reports whether they are all numbers.
func (t *table) information(c int) (m [36]float64, ok bool) {
	ok = true
	for i := range 6 {
		for j := i; j < 6; j++ {
			v, isNumber := t.float(c)
			c++
			m[6*i+j], m[6*j+i] = v, v
			ok = ok && isNumber
		}
	}
	return m, ok
}

func planarInformation(m *[36]float64) bool {
	for i := range 6 {
		for j := i; j < 6; j++ {
			if m[6*i+j] != 0 && !(inDim(i, 2) && inDim(j, 2)) {
				return false
			}
		}
	}
	return true
}

func (t *table) covFromInformation(m *[36]float64) Cov {
	const where = "i00..i55"
	c, err := CovFromInformation(*m, 3)
	if err == nil {
		return c
	}
	if lo, hi := extremeEigenvalues(mat.NewSymDense(6, append([]float64(nil), m[:]...))); !(lo >= -psdTol*hi) {
		t.fault(where, fmt.Sprintf("an indefinite information matrix (smallest eigenvalue %.6g, largest %.6g)", lo, hi),
			fmt.Sprintf("positive semidefinite: smallest at least %g of the largest", -psdTol))
		return c
	}
	t.fault(where, "an information matrix that cannot be written as sigmas: "+strings.TrimPrefix(err.Error(), "survey: "),
		"one that is positive definite on the components that were measured, with rows of zeros for the others")
	return c
}
