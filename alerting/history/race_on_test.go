//go:build race

package history

// raceEnabled says that the race detector slows everything down.
const raceEnabled = true
