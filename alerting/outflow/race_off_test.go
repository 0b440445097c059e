//go:build !race

package outflow

const racing = false
