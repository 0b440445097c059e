//go:build race

package drift

// racing: the race detector makes everything some ten times slower.
const racing = true
