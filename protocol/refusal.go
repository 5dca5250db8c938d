package protocol

// Refusal is a request that was understood and turned down, or not understood. Code is read as
// in HTTP: 400 malformed, 403 not armed, 404 no such run, 408 expired, 409 not in this state,
// 413 too large, 422 a recipe with findings, 500 a defect of the daemon, 501 not available yet,
// 503 not now. It travels as the NATS service error headers with the Problem as the body.
type Refusal struct {
	Code int
	Problem
}

func (r *Refusal) Error() string { return r.Problem.Error }

// Refuse makes a Refusal without findings.
func Refuse(code int, text string) *Refusal {
	return &Refusal{Code: code, Problem: Problem{Error: text, Findings: []Finding{}}}
}
