package forecast

import (
	"flag"
	"os"
	"testing"
)

func TestMain(m *testing.M) {
	flag.Set("rapid.seed", "20310203") // the same draws every time, so that what must occur among them does; -rapid.seed overrides
	flag.Set("rapid.nofailfile", "true")
	flag.Parse()
	os.Exit(m.Run())
}
