package main

import (
	"strings"
	"testing"
)

// smallLog writes a log of two robots that see each other and a landmark.
func smallLog(t *testing.T, dir string) {
	t.Helper()
	write(t, dir, "log/odometry.csv", "robot,t_s,v_mps,w_radps\n1,0,0.5,0\n2,0,0.5,0.1\n1,20,0,0\n2,20,0,0\n")
	write(t, dir, "log/observations.csv", "observer,t_s,subject,range_m,bearing_rad\n1,2,2,3,0.5\n1,2.2,2,3,0.5\n1,5,6,2,0\n2,6,6,2,0.1\n2,7,0,2,0\n2,8,7,2,0\n")
	write(t, dir, "log/landmarks_truth.csv", "subject,x_m,y_m,x_sd_m,y_sd_m\n6,1,2,0.001,0.001\n7,3,4,0.001,0.001\n")
}

func TestConvertSightingLog(t *testing.T) {
	dir := t.TempDir()
	smallLog(t, dir)
	convert := func(args string) answer {
		return selvage(t, dir, append([]string{"convert", "--from", "sighting-log", "log"}, strings.Fields(args)...)...)
	}
	a := convert("-o plain")
	a.want(t, 0)

	if want := "ties between robots and 3 sightings of 2 marks; 1 sighting left out, of nobody known.\n"; !strings.HasSuffix(a.stdout, want) || !strings.HasPrefix(a.stdout, "plain holds ") {
		t.Errorf("got %q, want ... %q", a.stdout, want)
	}
	if text := read(t, dir, "plain/marks.csv"); !strings.Contains(text, "m6,check,1,2,0,0.001,0.001,inf\n") {
		t.Errorf("marks:\n%s", text)
	}

	a = convert("-o private --marks private --landmarks mark --thin-s 1 --from-s 1 --to-s 7.5 --sigma-range 0.3 --sigma-bearing 0.1 --every-m 3 --every-s 100 --every-rad 7")
	a.want(t, 0)
	if want := "private holds 8 keyframes of 2 robots, 1 tie between robots and 2 sightings of 2 marks; 1 sighting left out, of nobody known; 1 sighting left out, outside the tracks; 1 sighting left out, too soon after the last.\n"; a.stdout != want {
		t.Errorf("got %q, want %q", a.stdout, want)
	}
	if got, want := read(t, dir, "private/marks.csv"), "mark,role,x_m,y_m,z_m,sx_m,sy_m,sz_m\nr1.m6,mark,,,,,,\nr2.m6,mark,,,,,,\n"; got != want {
		t.Errorf("marks\n%s\nwant\n%s", got, want)
	}
	if text := read(t, dir, "private/ties.csv"); !strings.Contains(text, ",range_bearing,") || !strings.Contains(text, ",3,0.5,,0.3,0.1,,") {
		t.Errorf("ties:\n%s", text)
	}

	a = convert("-o wrong --inject-wrong 0.4 --seed 7")
	a.want(t, 0)
	if !strings.HasSuffix(a.stdout, "; the identity of 2 was made wrong on purpose.\n") {
		t.Errorf("got %q", a.stdout)
	}
	a = convert("-o robots --marks none --landmarks control")
	a.want(t, 0)
	if !strings.Contains(a.stdout, "2 ties between robots and 0 sightings of 0 marks; 1 sighting left out, of nobody known; 3 sightings left out, not asked for.") {
		t.Errorf("got %q", a.stdout)
	}

	for args, says := range map[string]string{
		"-o x --seed 3":         "--inject-meetings and --seed go with --inject-wrong",
		"-o x --inject-wrong 2": "share of wrong identities is 2, expected 0 to 1",
		"-o x --every-m 0":      "way between keyframes is 0",
		"-o x --marks some":     "must be one of",
		"-o log":                "is not empty and holds no survey.yaml",
	} {
		convert(args).want(t, 2, says)
	}
	selvage(t, dir, "convert", "--from", "pose-tables", "log", "-o", "x", "--lag-s", "1").want(t, 2, "pose-tables goes without the flags of a sighting log")
	write(t, dir, "log/observations.csv", "observer,t_s,subject,range_m,bearing_rad\n1,2,2,3,45\n1,2.2,2,-3,0.5\n")
	convert("-o x").want(t, 2, "log: 2 places are wrong, nothing was written", `observations.csv:2: column bearing_rad: found "45"`, `observations.csv:3: column range_m: found "-3"`)
	if all := names(t, dir); strings.Contains(all, "x") {
		t.Errorf("something was written: %s", all)
	}
}
