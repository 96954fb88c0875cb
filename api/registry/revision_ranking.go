package registry

import (
	"cmp"
	"container/heap"
	"slices"

	"deltamoor/store"
)

// A recent remembers the last things kept, at most twice recentSize.
type recent[T any] struct{ young, old map[store.Ref]T }

const recentSize = 5000

func (r *recent[T]) find(ref store.Ref) (T, bool) {
	if x, ok := r.young[ref]; ok {
		return x, true
	}
	x, ok := r.old[ref]
	return x, ok
}

func (r *recent[T]) keep(ref store.Ref, x T) {
	if r.young == nil || len(r.young) >= recentSize {
		r.young, r.old = map[store.Ref]T{}, r.young
	}
	r.young[ref] = x
}

// A ranking keeps the largest |shift|/u; of equal ones the first in the ledger.
type ranking struct {
	most int
	list []Affected
}

func worse(a, b Affected) int {
	return cmp.Or(cmp.Compare(a.Ratio, b.Ratio), cmp.Compare(b.Position, a.Position), cmp.Compare(b.Line, a.Line))
}

func (r *ranking) Len() int           { return len(r.list) }
func (r *ranking) Less(i, j int) bool { return worse(r.list[i], r.list[j]) < 0 }
func (r *ranking) Swap(i, j int)      { r.list[i], r.list[j] = r.list[j], r.list[i] }
func (r *ranking) Push(x any)         { r.list = append(r.list, x.(Affected)) }
func (r *ranking) Pop() any {
	x := r.list[len(r.list)-1]
	r.list = r.list[:len(r.list)-1]
	return x
}

func (r *ranking) offer(a Affected) {
	if len(r.list) < r.most {
		heap.Push(r, a)
	} else if r.most > 0 && worse(a, r.list[0]) > 0 {
		r.list[0] = a
		heap.Fix(r, 0)
	}
}

func (im *impact) ranked() []Affected {
	list := slices.Clone(im.top.list)
	slices.SortFunc(list, func(a, b Affected) int { return worse(b, a) })
	return list
}
