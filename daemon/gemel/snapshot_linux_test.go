package main

import (
	"path/filepath"
	"testing"
)

func TestASnapshotAndACheckAreMadeBesideADaemon(t *testing.T) {
	data := served(t, "--bench", demoBenchFile)
	must(t, "start", "--data", data, "--recipe", "../../configs/demo-recipe.yaml")
	to := filepath.Join(t.TempDir(), "night.db")
	must(t, "export", "--data", data, "--snapshot", to)
	must(t, "check", "--data", data)
	if out, errOut, code := gemel(t, "check", "--data", data, "--rescue", to+".rescued"); code != exitFailed {
		t.Errorf("a rescue beside a daemon: exit %d\n%s%s", code, out, errOut)
	}
}
