package main

import (
	"strings"
	"testing"
)

func TestAPictureIsNotWrittenUnderAnotherKindsName(t *testing.T) {
	c := reportCommand{Data: t.TempDir(), Plot: "x.png"}
	if err := c.Run(t.Context(), nil); err == nil || !strings.Contains(err.Error(), "ends in .svg") {
		t.Errorf("%v; want the ending refused", err)
	}
}
