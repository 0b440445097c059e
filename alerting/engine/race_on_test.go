//go:build race

package engine_test

// racing: the race detector makes a step some ten times slower.
const racing = true
