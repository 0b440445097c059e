//go:build !race

package drift

const racing = false
