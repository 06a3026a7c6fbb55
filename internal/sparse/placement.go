package sparse

// placeBlocks finds the place of each block of the matrix in the factor, front
// after front and column after column.
func (s *Symbolic) placeBlocks(t *supernodes) {
	n := len(s.dims)
	count := make([]int32, n+1)
	column := func(q [2]int32) int32 { return min(t.place[q[0]], t.place[q[1]]) }
	for k := range n {
		count[k+1] = 1
	}
	for _, q := range s.pairs {
		count[column(q)+1]++
	}
	for k := range n {
		count[k+1] += count[k]
	}
	// Sorted block numbers: i < n is a diagonal block, n+k a pair.
	sorted := make([]int32, n+len(s.pairs))
	for i, k := range t.place {
		sorted[count[k]] = int32(i)
		count[k]++
	}
	for k, q := range s.pairs {
		c := column(q)
		sorted[count[c]] = int32(n + k)
		count[c]++
	}

	s.blocks = make([]placement, len(sorted))
	at := make([]int32, n) // row of a block below the pivots of the current front
	next := 0
	for i := range s.fronts {
		f := &s.fronts[i]
		f.block[0] = int32(next)
		row := int32(0)
		for _, j := range t.rowList[t.rows[i][0]:t.rows[i][1]] {
			at[j] = row
			row += s.inner[j+1] - s.inner[j]
		}
		end := t.columns[i][1]
		for ; next < len(sorted) && t.columnOf(sorted[next], s) < end; next++ {
			s.blocks[next] = s.placeBlock(f, t, sorted[next], at)
			// Cut at the first block column past 2/5: the first ones are longer.
			if c := int(s.inner[t.columnOf(sorted[next], s)]) - f.pivot; f.half == 0 && 5*c >= 2*f.k {
				f.half, f.halfBlock = c, int32(next)-f.block[0]
			}
		}
		f.block[1] = int32(next)
	}
}

// columnOf returns the position of the factor column that holds block b.
func (t *supernodes) columnOf(b int32, s *Symbolic) int32 {
	if n := int32(len(s.dims)); b >= n {
		q := s.pairs[b-n]
		return min(t.place[q[0]], t.place[q[1]])
	}
	return t.place[b]
}

func (s *Symbolic) placeBlock(f *front, t *supernodes, b int32, at []int32) placement {
	n := int32(len(s.dims))
	row, col := b, b
	if b >= n {
		row, col = s.pairs[b-n][0], s.pairs[b-n][1]
	}
	p := placement{rows: int8(s.dims[row]), cols: int8(s.dims[col])}
	if b < n {
		p.src = int(s.diagAt[b])
		p.transposed = true // it is symmetric, and this is the shorter way
	} else {
		p.src = int(s.offAt[b-n])
	}
	pr, pc := t.place[row], t.place[col]
	if pr < pc {
		pr, pc = pc, pr
		p.transposed = true
	}
	c := int(s.inner[pc]) - f.pivot
	if r := int(s.inner[pr]) - f.pivot; r < f.k {
		p.dst, p.ld = f.d+c*f.ldd+r, int32(f.ldd)
	} else {
		p.dst, p.ld = f.b+c*f.ldr+int(at[pr]), int32(f.ldr)
	}
	return p
}
