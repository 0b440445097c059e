//go:build race

package outflow

// racing: the race detector makes a step some ten times slower.
const racing = true
