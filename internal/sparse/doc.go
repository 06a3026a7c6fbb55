// Package sparse factorises symmetric positive definite block matrices of pose
// graphs: H = L L', with blocks of 3 (plane) or 6 (space) scalars a side.
//
// The work is split where it can be reused. Analyse looks at the pattern only:
// it orders the graph, finds the elimination tree, gathers columns into
// supernodes and fixes where every number will lie. A Matrix holds the values
// of one such pattern, a Factor the numbers of L. Factorising again with other
// values costs no allocation and no search.
//
//   - Ordering: approximate minimum degree (Amestoy, Davis, Duff, 'An Approximate
//     Minimum Degree Ordering Algorithm', SIAM J. Matrix Anal. Appl. 17, 1996) or,
//     where it pays, nested dissection (George, 'Nested Dissection of a Regular
//     Finite Element Mesh', SIAM J. Numer. Anal. 10, 1973).
//   - Supernodes are merged while a model of the running time says so.
//   - Numeric phase: multifrontal (Duff and Reid, 'The Multifrontal Solution of
//     Indefinite Sparse Symmetric Linear Equations', ACM TOMS 9, 1983) with kernels
//     for AVX2 and FMA where the processor has them, and plain Go elsewhere.
//   - Selected inverse: Takahashi, Fagan, Chen, 'Formation of a Sparse Bus
//     Impedance Matrix and its Application to Short Circuit Study', PICA 1973.
//
// Symbolic is immutable and may be shared between goroutines; a Matrix or a
// Factor belongs to one goroutine at a time.
//
// Reproducibility: with the same kernels, the same pattern and the same values
// give the same bits, for one worker and for two. The AVX2 kernels and the plain
// Go kernels round differently (fused multiply-add).
package sparse
