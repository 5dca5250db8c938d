//go:build !linux

package line

func (h *held) flush() {}
