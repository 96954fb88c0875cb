package registry

import (
	"encoding/json"
	"fmt"
	"math"
	"slices"
	"strconv"

	"deltamoor/store"
)

// NumbersCompared sets the numbers of one version beside those computed again.
type NumbersCompared struct {
	// Compared counts all numbers of the version that both have.
	Compared int
	// Stated are those it is asked for: value and u; of a calibration its parameters.
	Stated []ComparedNumber
	// Largest is the one that differs most in absolute terms; nil where none does.
	Largest *ComparedNumber
}

// A ComparedNumber is one number as stored and as computed again, in the unit of
// its place (‰ for values, u and intercepts).
type ComparedNumber struct {
	Place         string
	Stored, Again float64
}

// Difference is computed again less stored.
func (n ComparedNumber) Difference() float64 { return n.Again - n.Stored }

func (c *NumbersCompared) add(place string, stored, again float64, stated bool) {
	n := ComparedNumber{place, stored, again}
	c.Compared++
	if stated {
		c.Stated = append(c.Stated, n)
	}
	if d := math.Abs(n.Difference()); d > 0 && (c.Largest == nil || d > math.Abs(c.Largest.Difference())) {
		c.Largest = &n
	}
}

// compare walks two JSON texts of one version side by side.
func (c *NumbersCompared) compare(kind store.Kind, stored, again []byte) error {
	var a, b any
	if err := json.Unmarshal(stored, &a); err != nil {
		return err
	}
	if err := json.Unmarshal(again, &b); err != nil {
		return err
	}
	c.walk(kind, "", "", a, b)
	return nil
}

func (c *NumbersCompared) walk(kind store.Kind, place, label string, a, b any) {
	switch x := a.(type) {
	case map[string]any:
		y, ok := b.(map[string]any)
		if !ok {
			return
		}
		if name, ok := x["name"].(string); ok {
			label = name
		}
		var keys []string
		for k := range x {
			keys = append(keys, k)
		}
		slices.Sort(keys)
		for _, k := range keys {
			inner := k
			if place != "" {
				inner = place + "." + k
			}
			c.walk(kind, inner, label, x[k], y[k])
		}
	case []any:
		y, ok := b.([]any)
		for i := range x {
			if ok && i < len(y) {
				c.walk(kind, fmt.Sprintf("%s[%d]", place, i), label, x[i], y[i])
			}
		}
	case float64:
		if y, ok := b.(float64); ok {
			c.number(kind, place, label, x, y)
		}
	case string: // an assigned value is kept with its digits
		y, ok := b.(string)
		if !ok || place != "value" {
			return
		}
		p, err1 := strconv.ParseFloat(x, 64)
		q, err2 := strconv.ParseFloat(y, 64)
		if err1 == nil && err2 == nil {
			c.number(kind, place, label, p, q)
		}
	}
}

func (c *NumbersCompared) number(kind store.Kind, place, label string, stored, again float64) {
	stated := place == "value" || place == "u"
	if kind == store.KindCalibration && label != "" && len(place) > 10 && place[:10] == "parameters" {
		if stated = place[len(place)-6:] == ".value"; stated {
			place = label
		} else if stated = place[len(place)-2:] == ".u"; stated {
			place = "u(" + label + ")"
		}
	}
	c.add(place, stored, again, stated)
}
