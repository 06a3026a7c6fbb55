package scenarios

import (
	"fmt"

	"selvage/agent"
	"selvage/coordinator"
	"selvage/internal/adjust"
	"selvage/internal/lie"
	"selvage/internal/survey"
	"selvage/msgs"
)

// sightOf turns what a robot has seen into what its agent takes.
func sightOf(s *survey.Survey, robot string, kind survey.Kind, x *survey.Sight) (agent.Sight, error) {
	info, err := x.Information(s.Meta.Dimension)
	if err != nil {
		return agent.Sight{}, err
	}
	mount, err := adjust.Mounting(s, robot, x.Sensor)
	return agent.Sight{Sense: adjust.SenseOf(kind), Value: x.Value, Info: info, Mount: mount}, err
}

// sightingEvent is a sighting of a mark as its agent takes it.
func sightingEvent(s *survey.Survey, robot int, m *survey.Sighting) (agent.Event, error) {
	x, err := sightOf(s, s.Robots[robot].ID, m.Kind, &m.Sight)
	if err != nil {
		return nil, fmt.Errorf("sighting of mark %s: %w", m.Mark, err)
	}
	return agent.Sighting{Session: m.Session, ID: m.Key, ByStamp: m.ByStamp, StampNS: m.StampNS, Mark: m.Mark, Sight: x}, nil
}

// tieEvent is a tie as the agent of the robot that made it takes it.
func tieEvent(s *survey.Survey, t *survey.Tie) (agent.Event, error) {
	out := agent.Tie{
		ID:     t.ID,
		From:   msgs.KeyRef{Robot: t.FromRobot, Session: t.FromSession, ID: t.FromKey, ByStamp: t.FromByStamp, StampNS: t.FromStampNS},
		To:     msgs.KeyRef{Robot: t.ToRobot, Session: t.ToSession, ID: t.ToKey, ByStamp: t.ToByStamp, StampNS: t.ToStampNS},
		Source: t.Source, StampNS: t.StampNS,
	}
	var err error
	if t.Kind == survey.WholePose {
		out.Z = adjust.Pose(t.Pose)
		out.Info, err = t.Cov.Information(s.Meta.Dimension)
		return out, err
	}
	x, err := sightOf(s, t.FromRobot, t.Kind, &t.Sight)
	if err == nil {
		var target lie.SE3
		target, err = adjust.Mounting(s, t.ToRobot, t.Sight.Target)
		x.Spot = target.T
	}
	if err != nil {
		return nil, fmt.Errorf("tie %s: %w", t.ID, err)
	}
	out.Sight = &x
	return out, nil
}

// known lists the marks whose coordinates the base knows.
func known(s *survey.Survey) (out []coordinator.Mark) {
	role := map[survey.Role]coordinator.Role{survey.ControlPoint: coordinator.Control, survey.CheckPoint: coordinator.Check}
	for i := range s.Marks {
		if m := &s.Marks[i]; m.Role != survey.PlainMark {
			out = append(out, coordinator.Mark{Name: m.Name, Role: role[m.Role], At: m.T, Sigma: m.Sigma})
		}
	}
	return out
}
