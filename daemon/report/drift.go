package report

import (
	"slices"

	"gemel/daemon/bench"
	"gemel/protocol"
	"gemel/scan"
	"gemel/scan/estimate"
)

// driftQuestion asks what a run's references say of its night, by the profiles that judged them.
func driftQuestion(rows estimate.Rows, file *bench.File, ref scan.Reference) estimate.DriftQuestion {
	readings := slices.DeleteFunc(slices.Clone(rows.Readings), func(r protocol.Reading) bool { return r.Kind != protocol.Reference })
	return estimate.DriftQuestion{ReferenceQuestion: estimate.ReferenceQuestion{Of: ref, Profile: profiles(file, ref, readings)}}
}
