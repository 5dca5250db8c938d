package instruments

import "time"

// Look is what closing a gate works out before it draws.
func Look(w *World, from, to time.Time) GateTruth {
	w.mu.Lock()
	defer w.mu.Unlock()
	t, _ := w.look(from, to)
	return t
}
