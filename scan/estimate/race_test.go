//go:build race

package estimate

const raced = true
