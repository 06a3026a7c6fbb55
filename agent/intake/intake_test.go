package intake

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"net"
	"os"
	"os/exec"
	"path/filepath"
	"regexp"
	"slices"
	"strings"
	"sync"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"
	"go.uber.org/goleak"
	"gonum.org/v1/gonum/mat"

	"selvage/agent"
	"selvage/internal/lie"
	"selvage/internal/posegraph"
	"selvage/internal/survey"
	"selvage/msgs"
)

func TestMain(m *testing.M) { goleak.VerifyTestMain(m) }

func options(dim int) Options {
	return Options{Robot: "r1", Dim: dim, Robots: []survey.RobotMeta{
		{ID: "r1", Mounting: []survey.Mount{{Name: "camera", Kind: "sensor", X: 0.25, Z: 0.5, QZ: 1}}},
		{ID: "r2", Mounting: []survey.Mount{{Name: "prism", Kind: "target", Z: 0.75, QW: 1}}},
	}}
}

// robot is a core behind the intake, as a shell would be.
type robot struct {
	mu    sync.Mutex
	core  *agent.Agent
	now   int64
	took  []agent.Event
	calls int
}

func newRobot(dim int) *robot {
	c := agent.DefaultConfig("f", "r1", dim)
	c.Journal = msgs.JournalID{1}
	return &robot{core: agent.New(c)}
}

func (r *robot) Take(_ context.Context, events ...agent.Event) (int, error) {
	r.mu.Lock()
	defer r.mu.Unlock()
	r.calls++
	for n, e := range events {
		r.now++
		if _, err := r.core.Handle(r.now, e); err != nil {
			return n, err
		}
		r.took = append(r.took, e)
	}
	return len(events), nil
}

// run tells lines and returns the answers.
func run(t *testing.T, dim int, lines string) (*robot, []string) {
	t.Helper()
	r := newRobot(dim)
	var out bytes.Buffer
	if err := New(options(dim), r).Run(context.Background(), strings.NewReader(lines), &out); err != nil {
		t.Fatal(err)
	}
	return r, strings.Split(strings.TrimSuffix(out.String(), "\n"), "\n")
}

const (
	still  = `"x_m":1,"y_m":2,"z_m":3,"qx":0,"qy":0,"qz":1,"qw":0`
	sigmas = `"sx_m":0.1,"sy_m":0.2,"sz_m":0.5,"srx_rad":0.01,"sry_rad":0.02,"srz_rad":0.05`
	begin  = `{"event":"session"}` + "\n"
	first  = `{"event":"keyframe","id":1,"stamp_ns":10,` + still + "}\n"
	second = `{"event":"keyframe","id":2,"stamp_ns":20,` + still + "}\n"
	flat   = `"x_m":1,"y_m":2,"qz":1,"qw":0`
)

// Ten to the ninth, and so on, are exact; what is compared with a tolerance is an inverse.
var near = cmpopts.EquateApprox(1e-12, 1e-15)

func TestEvents(t *testing.T) {
	turned := lie.SE3{R: lie.Mat3{-1, 0, 0, 0, -1, 0, 0, 0, 1}, T: [3]float64{1, 2, 3}}
	camera := lie.SE3{R: lie.Mat3{-1, 0, 0, 0, -1, 0, 0, 0, 1}, T: [3]float64{0.25, 0, 0.5}}
	planar := turned
	planar.T[2] = 0
	diagonal := [36]float64{0: 100, 7: 25, 14: 4, 21: 1e4, 28: 2500, 35: 400}
	for _, c := range []struct {
		dim  int
		line string
		want agent.Event
	}{
		{3, `{"event":"keyframe","id":-5,"stamp_ns":9007199254740993,` + still + `}`, agent.Keyframe{Session: 1, ID: -5, StampNS: 9007199254740993, Pose: turned}},
		{2, `{"event":"keyframe","id":5,"stamp_ns":10,` + flat + `}`, agent.Keyframe{Session: 1, ID: 5, StampNS: 10, Pose: planar}},
		{2, `{"event":"keyframe","id":5,"stamp_ns":10,"z_m":0,"qx":0.0,"qy":null,` + flat + `}`, agent.Keyframe{Session: 1, ID: 5, StampNS: 10, Pose: planar}},
		{3, `{"event":"relative","kind":"odometry","from":1,"to":2,` + still + `,` + sigmas + `}`,
			agent.Relative{Session: 1, From: 1, To: 2, Z: turned, Info: diagonal}},
		{3, `{"event":"relative","session":1,"kind":"closure","from":1,"to":2,` + still + `,` + strings.Replace(sigmas, "0.5", "null", 1) + `}`,
			agent.Relative{Session: 1, From: 1, To: 2, Z: turned, Info: [36]float64{0: 100, 7: 25, 21: 1e4, 28: 2500, 35: 400}, Closure: true}},
		{2, `{"event":"relative","kind":"odometry","from":1,"to":2,` + flat + `,"covariance":[0.01,0,0, 0,0.04,0, 0,0,0.0025]}`,
			agent.Relative{Session: 1, From: 1, To: 2, Z: planar, Info: [36]float64{0: 100, 7: 25, 35: 400}}},
		{3, `{"event":"tie","kind":"pose","from_key":1,"to_robot":"r2","to_session":3,"to_stamp_ns":15,` + still + `,` + sigmas + `,"id":"t.1","source":"lidar","stamp_ns":16}`,
			agent.Tie{ID: "t.1", From: msgs.KeyRef{Robot: "r1", Session: 1, ID: 1}, To: msgs.KeyRef{Robot: "r2", Session: 3, ByStamp: true, StampNS: 15}, Z: turned, Info: diagonal, Source: "lidar", StampNS: 16}},
		{3, `{"event":"tie","kind":"range_bearing","from_key":2,"to_robot":"r2","to_session":3,"to_key":4,"range_m":6,"bearing_rad":0.5,"elevation_rad":-0.25,"s_range_m":0.1,"s_bearing_rad":0.2,"s_elevation_rad":0.5,"sensor":"camera","target":"prism"}`,
			agent.Tie{From: msgs.KeyRef{Robot: "r1", Session: 1, ID: 2}, To: msgs.KeyRef{Robot: "r2", Session: 3, ID: 4}, Sight: &agent.Sight{
				Sense: posegraph.RangeBearing, Value: [3]float64{6, 0.5, -0.25}, Info: lie.Mat3{0: 100, 4: 25, 8: 4}, Mount: camera, Spot: [3]float64{0, 0, 0.75}}}},
		{3, `{"event":"sighting","kind":"position","keyframe":1,"mark":"nail.7","x_m":1,"y_m":2,"z_m":-1,"sx_m":0.1,"sy_m":0.2,"sz_m":null}`,
			agent.Sighting{Session: 1, ID: 1, Mark: "nail.7", Sight: agent.Sight{Sense: posegraph.Position, Value: [3]float64{1, 2, -1}, Info: lie.Mat3{0: 100, 4: 25}, Mount: lie.Identity()}}},
		{3, `{"event":"sighting","kind":"range","stamp_ns":15,"mark":"m","range_m":8,"s_range_m":0.5}`,
			agent.Sighting{Session: 1, ByStamp: true, StampNS: 15, Mark: "m", Sight: agent.Sight{Sense: posegraph.Range, Value: [3]float64{8, 0, 0}, Info: lie.Mat3{0: 4}, Mount: lie.Identity()}}},
		{2, `{"event":"sighting","kind":"bearing","keyframe":1,"mark":"m","bearing_rad":1,"s_bearing_rad":0.5}`,
			agent.Sighting{Session: 1, ID: 1, Mark: "m", Sight: agent.Sight{Sense: posegraph.Bearing, Value: [3]float64{0, 1, 0}, Info: lie.Mat3{4: 4}, Mount: lie.Identity()}}},
	} {
		lines := begin + first + second
		if c.dim == 2 {
			lines = strings.ReplaceAll(lines, still, flat)
		}
		odometry := `{"event":"relative","kind":"odometry","from":1,"to":2,` + still + `,` + sigmas + "}\n" // for what names a moment
		if c.dim == 2 {
			odometry = ""
		}
		r, answers := run(t, c.dim, lines+odometry+c.line)
		if last := answers[len(answers)-1]; !strings.HasPrefix(last, `{"ok":`) || answers[0] != `{"ok":1,"session":1}` {
			t.Errorf("%s\nis answered %s", c.line, answers)
			continue
		}
		if diff := cmp.Diff(c.want, r.took[len(r.took)-1], near); diff != "" {
			t.Errorf("%s\n%s", c.line, diff)
		}
	}
}

// A covariance and its sigmas with correlations give the same information, the inverse of the covariance (as gonum finds it).
func TestInformation(t *testing.T) {
	sigma := [6]float64{0.1, 0.2, 0.5, 0.01, 0.02, 0.05}
	corr := map[string]float64{"c_x_y": 0.5, "c_z_rx": -0.25, "c_x_rz": 0.3, "c_ry_rz": 0.125}
	cov := mat.NewSymDense(6, nil)
	text := ""
	for i := range 6 {
		for j := i; j < 6; j++ {
			r := corr["c_"+components[i]+"_"+components[j]]
			if i == j {
				r = 1
			}
			cov.SetSym(i, j, r*sigma[i]*sigma[j])
		}
	}
	for name, r := range corr {
		text += fmt.Sprintf(`,%q:%g`, name, r)
	}
	var inverse mat.Dense
	if err := inverse.Inverse(cov); err != nil {
		t.Fatal(err)
	}
	whole, err := json.Marshal(mat.DenseCopyOf(cov).RawMatrix().Data)
	if err != nil {
		t.Fatal(err)
	}
	for _, uncertainty := range []string{sigmas + text, `"covariance":` + string(whole)} {
		r, answers := run(t, 3, begin+first+second+`{"event":"relative","kind":"odometry","from":1,"to":2,`+still+`,`+uncertainty+`}`)
		if answers[3] != `{"ok":4}` {
			t.Fatal(answers[3])
		}
		info := r.took[2].(agent.Relative).Info
		for i := range 36 {
			want := inverse.At(i/6, i%6)
			if e := math.Abs(info[i] - want); e > 1e-9*math.Sqrt(inverse.At(i/6, i/6)*inverse.At(i%6, i%6)) {
				t.Errorf("%s: entry %d is %g, want %g", uncertainty, i, info[i], want)
			}
		}
	}
}

func TestRefusals(t *testing.T) {
	step := `{"event":"relative","kind":"odometry","from":1,"to":2,` + still + `,` + sigmas + `}`
	seen := `{"event":"sighting","kind":"position","keyframe":1,"mark":"m","x_m":1,"y_m":2,"z_m":-1,"sx_m":0.1,"sy_m":0.2,"sz_m":0.1}`
	tie := `{"event":"tie","kind":"range","from_key":1,"to_robot":"r2","to_session":3,"to_key":4,"range_m":6,"s_range_m":0.1}`
	whole := func(v string) string {
		return strings.Replace(step, sigmas, `"covariance":[`+v+strings.Repeat(",0", 35-strings.Count(v, ","))+`]`, 1)
	}
	swap := func(line, old, new string) string {
		if !strings.Contains(line, old) {
			t.Fatalf("%s has no %s", line, old)
		}
		return strings.Replace(line, old, new, 1)
	}
	for _, c := range []struct{ line, field, want string }{
		{``, "", `found the end of the line, expected one JSON object of plain fields in a line`},
		{`[1]`, "", `found [, expected one JSON object`},
		{`{"event":"keyframe"`, "", `found the end of the line, expected one JSON object`},
		{`{"event":"keyframe"} {}`, "", `found { behind the object, expected one JSON object`},
		{"{\"event\":\"\xff\"}", "", `found bytes that are no UTF-8`},
		{`{"event":NaN}`, "event", `event: found no JSON (invalid character 'N'`},
		{`{"event":{"a":1}}`, "event", `event: found {, expected a plain value`},
		{`{"event":"keyframe","event":"tie"}`, "event", `event: found the field a second time, expected every field once`},
		{`{"event":"pose"}`, "event", `event: found "pose", expected "session", "keyframe", "relative", "tie" or "sighting"`},
		{`{"id":1}`, "event", `event: found no such field, expected a text of 1 to 32 bytes`},
		{`{"event":"session","robot":"r1"}`, "robot", `robot: found a field that has no meaning here, expected none of that name in a session`},
		{`{"event":"session","session":-1}`, "session", `session: found -1, expected an integer from 0 to 4294967295`},
		{swap(step, `"x_m":1`, `"x_m":1e999`), "x_m", `x_m: found 1e999, expected a number from -1e+09 to 1e+09`},
		{swap(step, `"x_m":1`, `"x_m":"1"`), "x_m", `x_m: found "1", expected a number`},
		{swap(step, `"x_m":1,`, ``), "x_m", `x_m: found no such field, expected a number`},
		{swap(step, `"x_m":1`, `"x_m":null`), "x_m", `x_m: found null, expected a number`},
		{swap(step, `"x_m":1`, `"X_m":1`), "x_m", `x_m: found no such field`},
		{swap(step, `"from":1`, `"from":1.5`), "from", `from: found 1.5, expected an integer of 64 bits`},
		{swap(step, `"from":1`, `"from":9223372036854775808`), "from", `from: found 9223372036854775808, expected an integer of 64 bits`},
		{swap(step, `"qz":1`, `"qz":1.001`), "qx..qw", `qx..qw: found a quaternion of norm 1.001, expected 1 within 1e-06`},
		{swap(step, `"odometry"`, `"guess"`), "kind", `kind: found "guess", expected "odometry" or "closure"`},
		{swap(step, `"sx_m":0.1`, `"sx_m":0`), "sx_m", `sx_m: found 0, expected a number from 1e-12 to 1e+12`},
		{swap(step, `"sx_m":0.1,`, ``), "sx_m", `sx_m: found no such field, expected a number from 1e-12 to 1e+12`},
		{swap(step, `"sx_m":0.1`, `"sx_m":0.1,"c_x_y":1`), "sigmas", `sigmas: found correlation matrix: singular (smallest eigenvalue 0, largest 2), expected an uncertainty that is positive definite`},
		{swap(step, `"sx_m":0.1`, `"sx_m":0.1,"c_y_x":0.5`), "c_y_x", `c_y_x: found a field that has no meaning here, expected none of that name in a relative`},
		{whole("0"), "covariance", `covariance: found 0 on the diagonal, expected variances from 1e-24 to 1e+24`},
		{swap(whole("1"), "[1,0", "[1"), "covariance", `covariance: found a list of 35 numbers, expected a list of 36 numbers`},
		{swap(whole("1"), "[1", "[[1]"), "covariance", `covariance: found [, expected a list of numbers`},
		{whole("1,0.1,0,0,0,0,0.2,1,0,0,0,0,0,0,1,0,0,0,0,0,0,1,0,0,0,0,0,0,1,0,0,0,0,0,0,1"), "covariance", `covariance: found 0.1 and 0.2 in row and column 1, 2, expected a symmetric matrix`},
		{whole("1,2,0,0,0,0,2,1,0,0,0,0,0,0,1,0,0,0,0,0,0,1,0,0,0,0,0,0,1,0,0,0,0,0,0,1"), "covariance", `covariance: found correlation of x and y is 2, expected -1 to 1, expected an uncertainty that is positive definite`},
		{swap(whole("1"), `"covariance"`, `"sx_m":1,"covariance"`), "covariance", `covariance: found 0 on the diagonal`},
		{swap(seen, `"keyframe":1`, `"keyframe":1,"stamp_ns":5`), "stamp_ns", `stamp_ns: found a moment beside keyframe, expected one of the two`},
		{swap(seen, `"keyframe":1,`, ``), "keyframe", `keyframe: found no such field, expected an integer of 64 bits`},
		{swap(seen, `"position"`, `"pose"`), "kind", `kind: found "pose", expected position, range_bearing, range, bearing`},
		{swap(seen, `"position"`, `"range"`), "range_m", `range_m: found no such field`},
		{swap(seen, `"mark":"m"`, `"mark":""`), "mark", `mark: found "", expected a text of 1 to 128 bytes`},
		{swap(seen, `"mark"`, `"target":"prism","mark"`), "target", `target: found a field that has no meaning here`},
		{swap(seen, `"sx_m":0.1,"sy_m":0.2,"sz_m":0.1`, `"sx_m":null,"sy_m":null,"sz_m":null`), "", `sight in which nothing is measured, expected an information above zero`},
		{swap(tie, `"range_m":6`, `"range_m":0`), "range_m", `range_m: found 0, expected a number from 1e-06 to 1e+09`},
		{swap(tie, `"range_m":6`, `"range_m":6,"bearing_rad":1`), "bearing_rad", `bearing_rad: found a field that has no meaning here, expected none of that name in a tie`},
		{swap(tie, `"range_m":6`, `"range_m":6,"sensor":"prism"`), "sensor", `sensor: found "prism", expected a mounting of robot r1 that is known, or nothing for its base_link`},
		{swap(tie, `"to_robot":"r2",`, ``), "to_robot", `to_robot: found no such field`},
		{swap(tie, `"to_key":4`, `"to_key":4,"to_stamp_ns":4`), "to_stamp_ns", `to_stamp_ns: found a moment beside to_key, expected one of the two`},
		// What only the agent can know.
		{swap(step, `"from":1`, `"from":9`), "", `relative pose from 9 to 2 of session 1: two known keyframes expected`},
		{first[:len(first)-1], "", `keyframe 1 of session 1 came twice`},
		{swap(tie, `"from_key":1`, `"from_key":1,"from_robot":"r3"`), "", `neither is r1`},
	} {
		// The lines around it are taken.
		r, answers := run(t, 3, begin+first+second+c.line+"\n"+step)
		if len(answers) != 5 || answers[2] != `{"ok":3}` || answers[4] != `{"ok":5}` || len(r.took) != 3 {
			t.Errorf("%s: the lines around it are answered %v", c.line, answers)
			continue
		}
		var got reply
		if err := json.Unmarshal([]byte(answers[3]), &got); err != nil {
			t.Fatal(err)
		}
		if want := "line 4: " + c.want; !strings.HasPrefix(got.Error, want) && !strings.HasSuffix(got.Error, c.want) || got.OK != 0 || got.Line != 4 || got.Field != c.field {
			t.Errorf("%s\nis answered %s\nwant %q of field %q", c.line, answers[3], c.want, c.field)
		}
	}
	for _, line := range []string{swap(first, `"y_m":2,"z_m":3`, `"y_m":2,"z_m":3e-3`), swap(step, `"z_m":3`, `"z_m":0`)} {
		if _, answers := run(t, 2, begin+line); !strings.Contains(answers[1], "expected nothing in a survey of dimension 2") {
			t.Errorf("%s\nis answered %s", line, answers[1])
		}
	}
	if _, answers := run(t, 3, first); !strings.Contains(answers[0], "session: found no such field, expected an integer") {
		t.Errorf("a keyframe before any session is answered %s", answers[0])
	}
}

// Sessions count on from what the agent knows, over all front ends.
func TestSessions(t *testing.T) {
	o := options(3)
	o.Newest = 4
	in := New(o, newRobot(3))
	tell := func(lines string) string {
		var out bytes.Buffer
		if err := in.Run(context.Background(), strings.NewReader(lines), &out); err != nil {
			t.Fatal(err)
		}
		return out.String()
	}
	for _, c := range []struct{ lines, want string }{
		{begin, `{"ok":1,"session":5}`},
		{begin + begin, "{\"ok\":1,\"session\":6}\n{\"ok\":2,\"session\":7}"},
		{`{"event":"session","session":3}` + "\n" + first, "{\"ok\":1,\"session\":3}\n{\"ok\":2}"},
		{`{"event":"session","session":9}`, `{"ok":1,"session":9}`},
		{strings.Replace(first, `"id"`, `"session":12,"id"`, 1), `{"ok":1}`},
		{begin, `{"ok":1,"session":13}`},
	} {
		if got := tell(c.lines); got != c.want+"\n" {
			t.Errorf("%s is answered %s, want %s", c.lines, got, c.want)
		}
	}
}

// slow hands over one byte at a time.
type slow struct{ r io.Reader }

func (s slow) Read(b []byte) (int, error) { return s.r.Read(b[:min(1, len(b))]) }

// What is there in one go is handed over in one go, and nothing waits for a line that has not come.
func TestLinesTogether(t *testing.T) {
	lines := begin
	for k := range 1000 {
		lines += fmt.Sprintf(`{"event":"keyframe","id":%d,"stamp_ns":%d,`, k, k) + still + "}\n"
	}
	for _, c := range []struct {
		in          io.Reader
		least, most int
	}{{strings.NewReader(lines), 5, 60}, {slow{strings.NewReader(lines)}, 1000, 1000}} {
		r := newRobot(3)
		var out bytes.Buffer
		if err := New(options(3), r).Run(context.Background(), c.in, &out); err != nil {
			t.Fatal(err)
		}
		if n := strings.Count(out.String(), "ok"); n != 1001 || len(r.took) != 1000 || r.calls < c.least || r.calls > c.most {
			t.Errorf("%d answers, %d events, handed over %d times, expected %d to %d", n, len(r.took), r.calls, c.least, c.most)
		}
	}
}

func TestLongLine(t *testing.T) {
	r := newRobot(3)
	var out bytes.Buffer
	err := New(options(3), r).Run(context.Background(), strings.NewReader(begin+first+`{"event":"`+strings.Repeat("x", maxLine)+"\"}\n"+second), &out)
	if err == nil || err.Error() != "line 3: found more than 16384 bytes without an end, expected a shorter line" {
		t.Errorf("error %v", err)
	}
	if answers := strings.Split(out.String(), "\n"); len(answers) != 4 || answers[1] != `{"ok":2}` || !strings.Contains(answers[2], "line 3: found more than") || len(r.took) != 1 {
		t.Errorf("answers %v", answers)
	}
}

// stopped is an agent that is gone.
type stopped struct{ cancel context.CancelFunc }

func (s stopped) Take(ctx context.Context, _ ...agent.Event) (int, error) {
	s.cancel()
	return 0, ctx.Err()
}

func TestEnd(t *testing.T) {
	ctx, cancel := context.WithCancel(context.Background())
	var out bytes.Buffer
	if err := New(options(3), stopped{cancel}).Run(ctx, strings.NewReader(begin+first), &out); !errors.Is(err, context.Canceled) || out.Len() > 0 {
		t.Errorf("%v, answered %s", err, out.String())
	}
}

// serve starts an intake on a socket and returns its path and what stops it.
func serve(t *testing.T, r *robot) (path string, stop func()) {
	t.Helper()
	path = filepath.Join(t.TempDir(), "front")
	l, err := Listen(path)
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithCancel(context.Background())
	ended := make(chan error, 1)
	go func() { ended <- New(options(3), r).Serve(ctx, l, func(err error) { t.Error(err) }) }()
	return path, func() {
		cancel()
		if err := <-ended; err != nil {
			t.Error(err)
		}
	}
}

func TestSocket(t *testing.T) {
	r := newRobot(3)
	path, stop := serve(t, r)
	info, err := os.Stat(path)
	if err != nil || info.Mode().Perm() != 0o600 {
		t.Errorf("socket of mode %v, %v", info.Mode(), err)
	}
	if _, err := Listen(path); err == nil || !strings.Contains(err.Error(), "another process listens there") {
		t.Errorf("listening twice: %v", err)
	}
	c, err := net.Dial("unix", path)
	if err != nil {
		t.Fatal(err)
	}
	defer c.Close()
	if err := c.SetDeadline(time.Now().Add(20 * time.Second)); err != nil {
		t.Fatal(err)
	}
	for _, x := range [][2]string{{begin, `{"ok":1,"session":1}`}, {first, `{"ok":2}`}} {
		if _, err := c.Write([]byte(x[0])); err != nil {
			t.Fatal(err)
		}
		got := make([]byte, len(x[1])+1)
		if _, err := io.ReadFull(c, got); err != nil || string(got) != x[1]+"\n" {
			t.Fatalf("answer %q, %v, want %q", got, err, x[1])
		}
	}
	stop() // with the front end still connected
	if _, err := os.Stat(path); !errors.Is(err, os.ErrNotExist) {
		t.Errorf("the socket is still there: %v", err)
	}
	// A socket that nobody listens on is replaced, a file that is none is not.
	dead, err := net.ListenUnix("unix", &net.UnixAddr{Name: path, Net: "unix"})
	if err != nil {
		t.Fatal(err)
	}
	dead.SetUnlinkOnClose(false)
	dead.Close()
	l, err := Listen(path)
	if err != nil {
		t.Fatal(err)
	}
	if err := l.Close(); err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(path, []byte("precious"), 0o600); err != nil {
		t.Fatal(err)
	}
	if _, err := Listen(path); err == nil || !strings.Contains(err.Error(), "no socket") {
		t.Errorf("listening on a file: %v", err)
	}
}

// The page says what is so: its lines are taken, and its program runs.
func TestPage(t *testing.T) {
	page, err := os.ReadFile(filepath.Join("..", "INTAKE.md"))
	if err != nil {
		t.Fatal(err)
	}
	blocks := regexp.MustCompile("(?s)```(json|python)\n(.*?)```").FindAllSubmatch(page, -1)
	lines, program := "", ""
	for _, b := range blocks {
		if string(b[1]) == "python" {
			program = string(b[2])
			continue
		}
		text := string(b[2])
		if strings.Contains(text, `"relative"`) { // its other keyframe
			lines += strings.Replace(first, `"id":1`, `"id":6`, 1)
		}
		lines += text
	}
	r, answers := run(t, 3, lines)
	if i := slices.IndexFunc(answers, func(a string) bool { return !strings.HasPrefix(a, `{"ok"`) }); i >= 0 || len(r.took) != 5 {
		t.Errorf("the lines of the page are answered %v", answers)
	}
	if n := strings.Count(strings.TrimSpace(program), "\n") + 1; n != 10 {
		t.Errorf("the program has %d lines, the page says ten", n)
	}
	python, err := exec.LookPath("python3")
	if err != nil {
		if os.Getenv("SELVAGE_CI") != "" {
			t.Fatal(err)
		}
		t.Skip(err)
	}
	r = newRobot(3)
	path, stop := serve(t, r)
	defer stop()
	ctx, cancel := context.WithTimeout(context.Background(), 30*time.Second)
	defer cancel()
	out, err := exec.CommandContext(ctx, python, "-c", program, path).CombinedOutput()
	if err != nil {
		t.Fatalf("%v\n%s", err, out)
	}
	want := `{'ok': 1, 'session': 1} {'ok': 2}
{'ok': 3} {'error': 'line 4: keyframe 1 of session 1 came twice', 'line': 4}
{'ok': 5}
`
	if string(out) != want {
		t.Errorf("the program prints\n%swant\n%s", out, want)
	}
}

// FuzzLine: whatever comes, a line is taken and is what an agent can look at, or it is refused with a field that the line could have.
func FuzzLine(f *testing.F) {
	for _, line := range []string{
		begin, first, `{"event":"relative","kind":"closure","from":1,"to":2,` + still + `,` + sigmas + `,"c_x_y":0.5}`,
		`{"event":"tie","kind":"range","from_key":1,"to_robot":"r2","to_session":3,"to_stamp_ns":4,"range_m":6,"s_range_m":0.1,"target":"prism"}`,
		`{"event":"sighting","kind":"bearing","stamp_ns":1,"mark":"m","bearing_rad":1,"s_bearing_rad":0.5,"elevation_rad":0,"s_elevation_rad":null}`,
		`{"covariance":[1,2,`, `{"a":[[]]}`, `{"":null}`,
	} {
		f.Add(line, true)
		f.Add(strings.ReplaceAll(line, still, flat), false)
	}
	f.Fuzz(func(t *testing.T, text string, space bool) {
		dim := 2
		if space {
			dim = 3
		}
		one := uint32(1)
		d := &decoder{Options: options(dim), sessions: &sessions{}, session: &one}
		l := d.line(1, []byte(text))
		if l.event == nil {
			if (l.reply.Error == "") == (l.reply.Session == nil) {
				t.Fatalf("%q is answered %+v", text, l.reply)
			}
			return
		}
		if l.reply.OK != 1 || l.reply.Error != "" {
			t.Fatalf("%q is an event and answered %+v", text, l.reply)
		}
		if b, err := json.Marshal(l.event); err != nil { // which refuses what is not finite
			t.Fatalf("%q: %s: %v", text, b, err)
		}
		newRobot(dim).Take(context.Background(), l.event) // refuses it most of the time, and does not panic
	})
}

func BenchmarkLine(b *testing.B) {
	one := uint32(1)
	d := &decoder{Options: options(3), sessions: &sessions{}, session: &one}
	text := []byte(`{"event":"relative","kind":"odometry","from":1,"to":2,` + still + `,` + sigmas + `}`)
	b.SetBytes(int64(len(text)))
	for b.Loop() {
		if l := d.line(1, text); l.event == nil {
			b.Fatal(l.reply.Error)
		}
	}
}
