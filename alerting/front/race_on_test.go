//go:build race

package front_test

// racing: the race detector makes a step some ten times slower.
const racing = true
