package bench

import "gemel/drivers"

// FirstCoincidence is the first channel, in the order of the counter's answers, that counts
// coincidences; empty when there is none.
func (f *File) FirstCoincidence() string {
	for _, c := range f.Counter.Channels {
		if _, pairs := f.Counter.Coincidences[drivers.Channel(c)]; pairs {
			return string(c)
		}
	}
	return ""
}
