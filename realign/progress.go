package realign

import "sync"

// progress turns pieces of work into the share of a whole that a Progress callback
// is told. It only ever hands numbers out, so that results cannot depend on it.
type progress struct {
	tell func(share float64) // nil: nobody listens

	mu       sync.Mutex
	at       float64
	to, step float64
}

// phase begins a part of the work that takes the whole from one share to another in so many
// pieces. A phase may end early, and may be repeated.
func (p *progress) phase(from, to float64, pieces int) {
	p.mu.Lock()
	defer p.mu.Unlock()
	p.at, p.to, p.step = from, to, (to-from)/float64(max(1, pieces))
}

// piece is called from any goroutine when a piece has been done.
func (p *progress) piece() {
	if p.tell == nil {
		return
	}
	p.mu.Lock()
	defer p.mu.Unlock()
	p.at = min(p.to, p.at+p.step)
	p.tell(p.at)
}

// Shares of the whole at which phases end: measured on 40x48x30x60 with one worker. Where
// a series differs the shares are off, and nothing else.
const (
	roughDone   = 0.34 // of EstimateVolumes with a mean: the first pass
	averageDone = 0.55

	firstMeasured = 0.27 // of EstimatePath: the first pass
	firstRebuilt  = 0.48
	nextMeasured  = 0.65

	takenOut = 0.42 // of Joint
	inTime   = 0.50
)
