package parallel

import (
	"context"
	"errors"
	"runtime"
	"slices"
	"testing"
)

func TestTurns(t *testing.T) {
	for _, workers := range []int{1, 2, 7} {
		var turns Turns
		var order []int
		err := For(context.Background(), workers, 200, func(_, i int) error {
			return turns.Do(i, func() error {
				for range (i * 7) % 13 {
					runtime.Gosched()
				}
				return nil
			}, func() { order = append(order, i) })
		})
		if err != nil || len(order) != 200 || !slices.IsSorted(order) {
			t.Fatalf("%d workers: %v, %v", workers, order, err)
		}
	}
}

// The error of the piece that failed is what comes out, and nobody waits for ever.
func TestTurnsFail(t *testing.T) {
	wrong := errors.New("wrong")
	for range 50 {
		var turns Turns
		ended := 0
		err := For(context.Background(), 5, 100, func(_, i int) error {
			return turns.Do(i, func() error {
				if i == 40 {
					return wrong
				}
				return nil
			}, func() { ended++ })
		})
		if err != wrong || ended > 40 {
			t.Fatalf("%d ended, %v", ended, err)
		}
	}
	defer func() {
		if p, ok := recover().(*Panic); !ok || p.Value != "mine" {
			t.Errorf("recovered %v", p)
		}
	}()
	var turns Turns
	For(context.Background(), 5, 100, func(_, i int) error {
		return turns.Do(i, func() error { return nil }, func() {
			if i == 30 {
				panic("mine")
			}
		})
	})
}
