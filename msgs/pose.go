package msgs

import "math"

// A pose of a summary or a correction crosses as Dim float64 numbers: position, then the rotation vector (axis times
// angle, at most pi), of which a planar one has only the third component. It comes back within 5e-16 in each
// component of the quaternion, with w at least 0.

func appendPose(dst []float64, p *Pose, dim int) []float64 {
	x, y, z, w := p.Q[0], p.Q[1], p.Q[2], p.Q[3]
	if w < 0 {
		x, y, z, w = -x, -y, -z, -w
	}
	f := 2 / w
	if n := math.Sqrt(x*x + y*y + z*z); n > 1e-100 {
		f = 2 * math.Atan2(n, w) / n
	}
	if dim == 3 {
		return append(dst, p.T[0], p.T[1], f*z)
	}
	return append(dst, p.T[0], p.T[1], p.T[2], f*x, f*y, f*z)
}

func takePose(v []float64, dim int) (Pose, error) {
	var p Pose
	var r [3]float64
	if dim == 3 {
		p.T[0], p.T[1], r[2] = v[0], v[1], v[2]
	} else {
		p.T = [3]float64(v)
		r = [3]float64(v[3:])
	}
	angle := math.Sqrt(r[0]*r[0] + r[1]*r[1] + r[2]*r[2])
	if !(angle <= math.Pi*(1+1e-9)) {
		return p, wrong("pose", angle, "a rotation of at most pi")
	}
	f := 0.5
	if angle > 1e-100 {
		f = math.Sin(angle/2) / angle
	}
	p.Q = [4]float64{f * r[0], f * r[1], f * r[2], math.Cos(angle / 2)}
	return p, nil
}
