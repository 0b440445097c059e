//go:build race

package main

// racing: the race detector makes an engine ten times as slow.
const racing = true
