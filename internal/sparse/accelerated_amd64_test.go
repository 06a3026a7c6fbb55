package sparse

// usePortable switches to the plain Go kernels until the returned function runs.
func usePortable() (restore func()) {
	before := accelerated
	accelerated = false
	return func() { accelerated = before }
}
