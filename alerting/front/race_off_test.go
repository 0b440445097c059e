//go:build !race

package front_test

const racing = false
