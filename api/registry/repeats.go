package registry

import (
	"cmp"
	"fmt"
	"math"
	"slices"

	"deltamoor/calib"
	"deltamoor/store"
)

// prepareRepeats sets the first readings of every run aside and, where the
// method says so, takes the mean of the rest as one reading. A run is a series
// of consecutive readings of one subject with one analysis, preparation or
// position; readings set aside remain what came before, for carry-over.
func (a *assembly) prepareRepeats(p *preparation) error {
	rule := a.spec.Repeats
	if rule == nil {
		return nil
	}
	if rule.Average && a.model.Memory == calib.MemoryCarryover {
		return Refuse(Invalid, "carry-over acts from one reading to the next, so it cannot be fitted to means of several: take the readings one by one, or leave the carry-over out")
	}
	order := make([]int, len(p.readings))
	for i := range order {
		order[i] = i
	}
	slices.SortStableFunc(order, func(i, j int) int {
		a, b := p.readings[i], p.readings[j]
		if a.Time != nil && b.Time != nil {
			if d := cmp.Compare(*a.Time, *b.Time); d != 0 {
				return d
			}
		}
		return cmp.Compare(a.stored.Number, b.stored.Number)
	})
	drop := map[int]bool{}
	var c complaints
	for start := 0; start < len(order); {
		key, ok := runOf(p.readings[order[start]], rule.Within)
		end := start + 1
		if !ok {
			if rd := p.readings[order[start]]; repeatable(rd.Role) {
				c.add(fmt.Sprintf("reading %d", rd.stored.Number), "no "+rule.Within, "the %s it belongs to, by which the method takes repeats together", rule.Within)
			}
			start = end
			continue
		}
		for end < len(order) {
			next, ok := runOf(p.readings[order[end]], rule.Within)
			if !ok || next != key {
				break
			}
			end++
		}
		a.takeRun(p, order[start:end], *rule, drop)
		start = end
	}
	if err := Complain(cannotFit, c); err != nil {
		return err
	}
	slices.Sort(p.setAside)
	kept := p.readings[:0]
	for i, rd := range p.readings {
		if !drop[i] {
			kept = append(kept, rd)
		}
	}
	p.readings = kept
	slices.SortFunc(p.means, func(a, b store.MeanReading) int { return cmp.Compare(a.Number, b.Number) })
	return nil
}

func repeatable(role calib.Role) bool {
	return role == calib.Anchor || role == calib.Control || role == calib.Monitor || role == calib.Sample
}

type runKey struct {
	role          calib.Role
	subject, name string
}

func runOf(rd preparedReading, within string) (runKey, bool) {
	k := runKey{role: rd.Role, subject: rd.Subject}
	switch within {
	case "analysis":
		k.name = rd.stored.Analysis
	case "preparation":
		k.name = rd.stored.Preparation
	case "position":
		if rd.stored.Position != nil {
			k.name = fmt.Sprint(*rd.stored.Position)
		}
	}
	return k, k.name != "" && repeatable(rd.Role)
}

// takeRun applies the rule to one run, in the order of measurement.
func (a *assembly) takeRun(p *preparation, run []int, rule store.Repeats, drop map[int]bool) {
	var counted []int
	for i, index := range run {
		rd := &p.readings[index]
		switch {
		case i < rule.IgnoreFirst:
			rd.Excluded = true
			p.setAside = append(p.setAside, rd.stored.Number)
		case !rd.Excluded:
			counted = append(counted, index)
		}
	}
	if len(counted) == 0 && slices.ContainsFunc(run, func(i int) bool { return !a.excluded[p.readings[i].stored.Number] }) {
		rd := p.readings[run[0]]
		p.flags = append(p.flags, calib.Flag{Code: "nothing_left_of_run", Severity: calib.Warning, Subject: rd.Subject, Readings: numbersOf(p.readings, run),
			Message: fmt.Sprintf("Nothing is left of %d readings of %s: the method sets the first %d aside.", len(run), rd.Subject, rule.IgnoreFirst),
			Advice:  "Measure more readings of each, or set fewer aside in a further version of the method."})
	}
	if !rule.Average || len(counted) == 0 {
		return
	}
	head := &p.readings[counted[0]]
	mean := p.mean(counted)
	mean.ID = fmt.Sprintf("%s/%d/mean", head.stored.Session, p.readings[run[0]].stored.Number)
	var sd *float64
	if len(counted) > 1 {
		var raws []float64
		for _, i := range counted {
			raws = append(raws, p.readings[i].Raw)
		}
		_, s := meanAndSD(raws)
		sd = &s
	}
	for _, i := range counted[1:] {
		drop[i] = true
	}
	*head = mean
	p.means = append(p.means, store.MeanReading{Number: mean.numbers[0], Readings: mean.numbers, SD: sd})
}

func numbersOf(readings []preparedReading, indices []int) []int {
	var out []int
	for _, i := range indices {
		out = append(out, readings[i].stored.Number)
	}
	return out
}

// mean is the mean of readings: value, time, size and derivatives; a declared u
// becomes √Σu²/n.
func (p *preparation) mean(indices []int) preparedReading {
	out := p.readings[indices[0]]
	n := float64(len(indices))
	out.numbers, out.per = nil, make([]float64, len(p.shared))
	var raw, time, size, u2 float64
	timed, sized, stated := true, true, true
	for _, i := range indices {
		rd := p.readings[i]
		out.numbers = append(out.numbers, rd.stored.Number)
		raw += rd.Raw
		for j := range out.per {
			out.per[j] += rd.per[j] / n
		}
		if rd.Time != nil {
			time += *rd.Time
		} else {
			timed = false
		}
		if rd.Size != nil {
			size += *rd.Size
		} else {
			sized = false
		}
		if rd.StandardUncertainty != nil {
			u2 += float64(*rd.StandardUncertainty * *rd.StandardUncertainty)
		} else {
			stated = false
		}
	}
	out.Raw, out.changed = raw/n, len(indices) > 1 || out.changed
	out.Time, out.Size, out.StandardUncertainty = nil, nil, nil
	if timed {
		time /= n
		out.Time = &time
	}
	if sized {
		size /= n
		out.Size = &size
	}
	if stated {
		u := math.Sqrt(u2) / n
		out.StandardUncertainty = &u
	}
	return out
}
