package scenarios

import (
	"fmt"
	"math"

	"selvage/agent"
	"selvage/internal/report"
)

// charts draws the error of the map and the bytes of each robot over time.
func (r *Run) charts(s *Score) []report.ChartGroup {
	axis, unit := "time (min)", 60e9
	if r.OnBus {
		axis, unit = "time on the bus (s)", 1e9
	}
	whole := func(bytes int) string { return fmt.Sprintf("%.0f kB", float64(bytes)/1000) }
	at := make([]float64, len(r.Samples))
	var errors []float64
	finite := 0
	final := math.NaN()
	for i := range r.Samples {
		at[i] = float64(r.Samples[i].NowNS) / unit
		e := r.Samples[i].ErrorM
		errors = append(errors, e)
		if !math.IsNaN(e) {
			finite++
			final = e
		}
	}
	var out []report.ChartGroup
	if finite > 1 {
		out = append(out, report.ChartGroup{
			Title: "Error of the map over time",
			Note:  "Root mean square error of what the robots share, junctions of the newest epoch, each island moved onto the truth as one.",
			Charts: []report.Chart{{
				Title: "Position error against truth", XLabel: axis, YLabel: "position error (m)",
				Series: []report.Series{{Label: fmt.Sprintf("%.3f m", final), X: at, Y: errors}},
			}},
		})
	}
	if len(at) < 3 || r.Outing.EndNS == 0 {
		return out // everything was delivered at once: there is no growth to draw
	}
	group := report.ChartGroup{
		Title: "Bytes sent by each robot over time",
		Note:  "Beside it, in ink or as a threshold, what the raw graph would have taken: 58 bytes for each keyframe, 144 for each measurement. All at one scale.",
	}
	for i := range s.Robots {
		x := &s.Robots[i]
		sent := make([]float64, len(at))
		for k := range r.Samples {
			sent[k] = float64(r.Samples[k].UpSum[i]) / 1000
		}
		chart := report.Chart{
			Title: x.ID, XLabel: axis, YLabel: "so far (kB)",
			Series: []report.Series{{Label: "sent " + whole(x.BytesUp), Hue: i + 1, X: at, Y: sent}},
		}
		if raw := float64(x.BytesRaw) / 1000; r.OnBus { // everything was there from the start
			chart.Threshold, chart.ThresholdLabel = &raw, "raw "+whole(x.BytesRaw)
		} else {
			chart.Series = append(chart.Series, report.Series{Label: "raw " + whole(x.BytesRaw), X: at, Y: r.rawOverTime(i)})
		}
		group.Charts = append(group.Charts, chart)
	}
	return append(out, group)
}

// rawOverTime returns the size of a robot's raw graph at each sample, kB.
func (r *Run) rawOverTime(robot int) []float64 {
	out := make([]float64, len(r.Samples))
	feed := r.Outing.Feed[robot]
	sum, next := 0, 0
	for k := range r.Samples {
		for next < len(feed) && feed[next].AtNS <= r.Samples[k].NowNS {
			if feed[next].Kind == KeyframeEvent {
				sum += agent.RawPoseBytes
			} else {
				sum += agent.RawMeasurementBytes
			}
			next++
		}
		out[k] = float64(sum) / 1000
	}
	return out
}
