package registry

import (
	"context"
	"time"
)

// WorkInSteps works on a job in steps of some versions, and calls after when
// each is on disk.
func (r *Registry) WorkInSteps(ctx context.Context, laboratory, holder string, versions int, after func()) (bool, error) {
	return r.work(ctx, laboratory, holder, stepping{versions: versions, period: time.Hour, after: after})
}
