package msgs

import "cmp"

// Epoch orders what a base says: first by the incarnation of its store, then by a number that counts solutions.
type Epoch struct{ Incarnation, Number uint64 }

// Compare is negative when a is older than b, zero when equal, positive when newer.
func (a Epoch) Compare(b Epoch) int {
	return cmp.Or(cmp.Compare(a.Incarnation, b.Incarnation), cmp.Compare(a.Number, b.Number))
}

// JournalID names one journal file of one robot: 128 random bits, new with every new file.
type JournalID [16]byte

// Pose takes coordinates of the frame it describes into the frame it is given in: a position T in metres and a unit
// quaternion Q, ordered x, y, z, w. In a planar survey T[2], Q[0] and Q[1] are zero.
type Pose struct {
	T [3]float64
	Q [4]float64
}

// Header says who wrote a record and where it stands in the journal.
type Header struct {
	Fleet, Robot string
	Journal      JournalID
	Number       uint64 // position in the journal, from 1; 0 for what no journal holds
	Session      uint32 // the frame session that was running
	Signature    []byte // over the message without it; empty where the fleet does not sign
}

// KeyRef names a keyframe of a robot: by its id, or by the time at which the robot was seen when the id is not known.
type KeyRef struct {
	Robot   string
	Session uint32
	ID      int64 // when ByStamp is false
	ByStamp bool
	StampNS int64 // when ByStamp is true
}

// Tie is one measurement between two robots, or between two sessions: the pose of To in the frame of From, or, as a Sight, less
// than that.
type Tie struct {
	Header   Header
	ID       string // names the tie for good: 1 to 128 visible ASCII characters
	From, To KeyRef // one of them belongs to the robot of the header
	Pose     Pose
	Info     []float64 // Dim x Dim row-major, information in 1/m^2, 1/(m rad), 1/rad^2; positive semidefinite
	Sight    *Sight    // instead of Pose and Info, which are then empty
	Dim      int       // 3 in the plane (x, y, rz), 6 in space (x, y, z, rx, ry, rz)
	Source   string    // what measured it
	StampNS  int64
}

// Sense says what a sight measures.
type Sense uint8

// The senses. A sight has three components: x, y, z in the frame of the sensor, or range, bearing and elevation. What its sense
// does not measure is zero, and so are z and elevation in the plane.
const (
	Position Sense = iota + 1
	RangeBearing
	Range
	Bearing
)

// Sight is where, or in what direction, a sensor on From has seen a spot on To.
type Sight struct {
	Sense Sense
	Value [3]float64 // metres, radians; the bearing from x forward towards y, the elevation from the x-y plane towards z
	Info  [9]float64 // 3 x 3 row-major, positive semidefinite; rows and columns of what is not measured are zero
	Mount Pose       // of the sensor, in the frame of From
	Spot  [3]float64 // in the frame of To
}

// Junction is a keyframe that stays in a summary.
type Junction struct {
	ID       int64
	Pose     Pose    // in the frame of the session
	TravelM  float64 // metres along the track since the session began; float32 on the wire
	StampNS  int64
	Resolved []int64 // stamps of a Want that this junction answers
}

// Point is a mark that stays in a summary.
type Point struct {
	Mark string     // 1 to 128 visible ASCII characters
	At   [3]float64 // in the frame of the session, metres; the third is zero in the plane
}

// Level is what a robot knows of the vertical: up, as a unit vector in the frame of a junction.
type Level struct {
	Node  int // index into Part.Junctions
	Up    [3]float64
	Sigma float64 // of its direction, radians
}

// Clique is a condensed factor over junctions and points: cost 1/2 e'He + B'e, where e stacks, of every node but the first, Log of
// the change of its pose seen from the first, then, of every point, the change of its place seen from the first node, turned
// into the axes of the session at which the clique was made. Its information contains no frame.
type Clique struct {
	Nodes  []int     // indices into Part.Junctions, distinct, the first is the reference; two or more, or one beside points
	Points []int     // indices into Part.Points, distinct
	H      []float64 // d x d row-major, d = Dim*(len(Nodes)-1)+3*len(Points), positive semidefinite; float32 factor on the wire
	B      []float64 // d; float32 on the wire
}

// Part is the summary of one session.
type Part struct {
	Session   uint32
	Junctions []Junction // ids ascending
	Points    []Point    // marks ascending
	Seen      []string   // marks that the session has seen and that are no points, ascending
	Levels    []Level    // nodes ascending
	Cliques   []Clique
	Cost      float64 // 1/2 r'Wr of the whole session at the poses of this part
	Keyframes int     // how many keyframes the session has
}

// Summary is all a robot tells of its pose graphs. The newest replaces every older one.
type Summary struct {
	Header    Header
	Version   uint64 // counts the robot's summaries
	Answers   Epoch  // the newest correction that went into it
	Unchanged bool   // the summary of Version still stands; Parts is empty
	Dim       int
	Parts     []Part // sessions ascending
}

// Want is what the base asks of one robot.
type Want struct {
	Fleet, Robot string
	Epoch        Epoch
	Term         uint64
	Keys         []KeyRef    // keyframes that must be junctions; all of this robot
	Marks        []string    // marks that must be points wherever they were seen, ascending
	Gaps         [][2]uint64 // record numbers missing at the base, first and last of each gap, ascending
	Safe         uint64      // every record up to this one is safe at the base
	Journal      JournalID   // the journal that Gaps and Safe count in
	PeriodMS     uint32      // how often to publish
	Signature    []byte
}

// CorrectedPart is one session as the base sees it.
type CorrectedPart struct {
	Session          uint32
	Joined           bool // tied to the datum the base shows
	IDs              []int64
	Poses            []Pose      // one for each id, in the datum of Island
	Points           []Point     // of the summary, where they lie in that datum; marks ascending
	DatumFromSession Pose        // the zero Pose when the session is not placed; IDs is empty then
	Island           string      // names the sessions that share a datum
	CovNodes         [][]int     // cliques: indices into IDs
	Cov              [][]float64 // for each clique the joint covariance, square, Dim*len(nodes), row-major
}

// Correction is the answer of the base to one summary.
type Correction struct {
	Fleet, Robot   string
	Epoch          Epoch
	Term           uint64
	SummaryVersion uint64 // of the summary that went into it
	Dim            int
	Parts          []CorrectedPart // sessions ascending
	Signature      []byte
}

// VerdictKind says what became of a tie.
type VerdictKind uint8

// A tie is held when the evidence supports it, refused when it contradicts the rest, open while the evidence does not decide.
const (
	Held VerdictKind = iota + 1
	Refused
	Open
)

func (k VerdictKind) String() string {
	switch k {
	case Held:
		return "held"
	case Refused:
		return "refused"
	case Open:
		return "open"
	}
	return "unknown"
}

// Evidence is what a verdict rests on.
type Evidence struct {
	Statistic float64 // the test statistic, chi-square with DoF degrees of freedom if the tie is true
	DoF       int
	Limit     float64 // Statistic above it speaks against the tie
	Places    int     // separate places whose ties agree with this one
	Margin    float64 // how far the decision is from turning, in nats; negative when it went against the tie
}

// Verdict tells a robot what became of a tie.
type Verdict struct {
	Fleet, Robot string
	Tie          string // Tie.ID
	Verdict      VerdictKind
	Reason       string
	Evidence     Evidence
	Epoch        Epoch
	Term         uint64
	StampNS      int64
	Signature    []byte
}

// Heartbeat says that a robot is alive and how far it is.
type Heartbeat struct {
	Header             Header
	NewestNumber       uint64 // newest record of the journal
	Applied            Epoch  // newest correction applied
	SummaryVersion     uint64 // newest summary published
	HighestIncarnation uint64 // highest incarnation of a base ever seen
	State              string // what the agent is doing, one or a few words
	StampNS            int64  // the robot's clock at sending
}

// Lease says which coordinator of a fleet speaks.
type Lease struct {
	Fleet, Holder     string
	Term, Incarnation uint64
	Signature         []byte
}
