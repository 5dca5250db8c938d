//go:build race

package source

const raced = true
