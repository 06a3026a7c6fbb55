package coordinator

import "selvage/msgs"

// Standing is how far a robot has come, as the base knows it.
type Standing struct {
	Robot   string
	Applied msgs.Epoch // the newest correction that it has told of applying
	Missing int        // keyframes that ties touch and that its summary does not contain yet
	Gaps    bool       // ties that it has told of have not come yet
}

// Standings returns the robots that have been heard of, by name.
func (c *Coordinator) Standings() []Standing {
	out := make([]Standing, 0, len(c.robots))
	for _, r := range c.sorted() {
		out = append(out, Standing{r.name, r.applied, len(c.missing(r)), r.current.gappy()})
	}
	return out
}
