//go:build race

package nighttest

const raced = true
