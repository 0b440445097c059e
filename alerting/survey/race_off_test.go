//go:build !race

package survey

const racing = false
