package survey

import (
	"fmt"
	"math"
)

// ReadVerdicts reads results/verdicts.csv of the survey folder dir, from which s was read; it returns nothing when there is no such
// file. An error is *Violations when the content breaks the rules: every row is one of the ties of s, each at most once. Ties
// without a row have no verdict.
func ReadVerdicts(dir string, s *Survey) ([]ResultVerdict, error) {
	var bad sink
	left := make(map[string]bool, len(s.Ties))
	for i := range s.Ties {
		left[s.Ties[i].ID] = true
	}
	const name = resultsName + "/verdicts.csv"
	t, err := openTable(dir, name, verdictColumns, true, &bad)
	if err != nil {
		return nil, err
	}
	if t == nil {
		return nil, bad.err()
	}
	defer t.close()
	var all []ResultVerdict
	for {
		ok, err := t.next()
		if err != nil {
			return nil, err
		}
		if !ok {
			break
		}
		v := ResultVerdict{Tie: string(t.text(0)), Verdict: string(t.text(1)), Reason: string(t.text(2)), Evidence: string(t.text(verdictEvidence))}
		switch still, known := left[v.Tie]; {
		case !known:
			t.faultAt(0, quote(v.Tie), "the id of a tie of this survey")
		case !still:
			t.faultAt(0, quote(v.Tie)+" a second time", "each tie once")
		default:
			left[v.Tie] = false
		}
		if v.Verdict != "held" && v.Verdict != "refused" && v.Verdict != "open" {
			t.faultAt(1, quote(v.Verdict), "held, refused or open")
		}
		if e := v.Evidence; e != "" && e != "held" && e != "refused" && e != "open" {
			t.faultAt(verdictEvidence, quote(e), "held, refused, open or nothing")
		}
		if !validNote(v.Reason) {
			t.faultAt(2, quote(v.Reason), "one line of printable text")
		}
		for c, to := range []*float64{&v.ChiSquare, &v.Threshold, &v.Redundancy, &v.Detectable} {
			*to = math.NaN()
			if len(t.text(3+c)) > 0 {
				*to, _ = t.float(3 + c)
			}
		}
		if !t.bad {
			all = append(all, v)
		}
	}
	if err := bad.err(); err != nil {
		return nil, err
	}
	return all, nil
}

// ResultsReplaceable returns an error unless the results of the folder dir may be written anew: there are none, or their tables
// begin as [WriteResults] lets them begin.
func ResultsReplaceable(dir string) error {
	var bad sink
	for _, f := range []struct {
		name    string
		columns []column
	}{{"poses.csv", resultPoseColumns[:4]}, {"verdicts.csv", verdictColumns[:2]}, {"datum_from_session.csv", datumColumns[:4]}} {
		t, err := openTable(dir, resultsName+"/"+f.name, f.columns, true, &bad)
		if err != nil {
			return err
		}
		if t != nil {
			t.close()
		}
	}
	if err := bad.err(); err != nil {
		return fmt.Errorf("survey: %s holds tables that are not results of a survey: %w", dir, err)
	}
	return nil
}
