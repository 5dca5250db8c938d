package protocol

// Numbered is an entry with its place in the journal. IDs rise in the order of commit, over all
// runs; they mean nothing outside the logbook and are never published.
type Numbered struct {
	ID int64
	Entry
}
