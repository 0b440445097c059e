//go:build race

package survey

// racing: the race detector makes an engine ten times as slow.
const racing = true
