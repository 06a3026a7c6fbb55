//go:build !amd64

package sparse

func usePortable() (restore func()) { return func() {} }
