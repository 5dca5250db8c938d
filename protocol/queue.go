package protocol

// QueueReply lists the runs of a bench that wait, the next first. The run that is being executed is
// not among them: the status has it.
type QueueReply struct {
	Bench string      `json:"bench"`
	Queue []QueuedRun `json:"queue"`
}

// QueuedRun is a run that waits. Its state is queued, or where it was interrupted and is still to be
// taken up the last that is written: it goes on first.
type QueuedRun struct {
	Run             RunID  `json:"run"`
	Title           string `json:"title"`
	QueuedAt        Time   `json:"queued_at"`
	Who             string `json:"who"`
	State           State  `json:"state"`
	ReadingsPlanned *int   `json:"readings_planned"` // null where that is not known
}

// WaitingRun is a run that waits, as the status names it.
type WaitingRun struct {
	Run   RunID  `json:"run"`
	Title string `json:"title"`
}

// ReorderRequest puts the runs it names first, in its order; the others stay behind them as they
// are. It is answered with the queue as it is then.
type ReorderRequest struct {
	Runs      []RunID `json:"runs"`
	Who       string  `json:"who"`
	ExpiresAt *Time   `json:"expires_at,omitempty"`
}

// MostQueued is how many runs may wait.
const MostQueued = 200
