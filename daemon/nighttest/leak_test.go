package nighttest

import (
	"testing"

	"go.uber.org/goleak"
)

// What a test of this package starts has to have ended when all of them have.
func TestMain(m *testing.M) { goleak.VerifyTestMain(m) }
