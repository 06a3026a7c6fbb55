// Command gen writes the AVX2 kernels of package sparse:
//
//	go run . -out ../kernels_amd64.s -stubs ../kernels_amd64.go -pkg sparse
//
// It is a module of its own so that users of the package need not fetch the
// generator's library. Sixteen vector registers are all there are: a seventeenth
// would be encoded for AVX-512, which a test of the package looks for.
package main

import (
	. "github.com/mmcloughlin/avo/build"
	. "github.com/mmcloughlin/avo/operand"
	"github.com/mmcloughlin/avo/reg"
)

func main() {
	product()
	solvePanel()
	addRuns()
	subtractProduct()
	subtractTransposed()
	Generate()
}

var labels int

// label returns a new label with the given stem.
func label(stem string) string {
	labels++
	return stem + string(rune('A'+labels/26%26)) + string(rune('a'+labels%26))
}

// stride loads a leading dimension in bytes.
func stride(name string) reg.Register {
	s := Load(Param(name), GP64())
	SHLQ(Imm(3), s)
	return s
}

// columns addresses up to six columns at p with a stride.
type columns struct{ p, p3, stride reg.Register }

func newColumns(p, p3, stride reg.Register, n int) columns {
	if n > 3 {
		LEAQ(Mem{Base: stride, Index: stride, Scale: 2}, p3)
		ADDQ(p, p3)
	}
	return columns{p, p3, stride}
}

func (c columns) at(col, row int) Mem {
	base := c.p
	if col >= 3 {
		base = c.p3
	}
	m := Mem{Base: base, Disp: 8 * row}
	if col%3 > 0 {
		m.Index, m.Scale = c.stride, uint8(col%3)
	}
	return m
}

func vectors(n int) []reg.VecVirtual {
	v := make([]reg.VecVirtual, n)
	for i := range v {
		v[i] = YMM()
	}
	return v
}

// accumulate subtracts A B' from acc[col*rows+row], where ap walks over rows
// vectors of A and bp over the columns' values of B, count times. It changes all
// three registers.
func accumulate(acc []reg.VecVirtual, ap, bp, count, lda, ldb reg.Register, rows, cols int) {
	loop := label("inner")
	a := vectors(rows)
	b := YMM()
	Label(loop)
	for r := range rows {
		VMOVUPD(Mem{Base: ap, Disp: 32 * r}, a[r])
	}
	for c := range cols {
		VBROADCASTSD(Mem{Base: bp, Disp: 8 * c}, b)
		for r := range rows {
			VFNMADD231PD(b, a[r], acc[c*rows+r])
		}
	}
	ADDQ(lda, ap)
	ADDQ(ldb, bp)
	DECQ(count)
	JNZ(LabelRef(loop))
}

// rowTiles runs body over tiles of eight rows, then one of four, until rem rows
// are done; the last tile may run up to three rows further.
func rowTiles(rem reg.Register, body func(rows int)) {
	eight, four, done := label("eight"), label("four"), label("done")
	Label(eight)
	CMPQ(rem, Imm(4))
	JLE(LabelRef(four))
	body(2)
	SUBQ(Imm(8), rem)
	JMP(LabelRef(eight))
	Label(four)
	TESTQ(rem, rem)
	JLE(LabelRef(done))
	body(1)
	SUBQ(Imm(4), rem)
	JMP(LabelRef(four))
	Label(done)
}

func product() {
	TEXT("productAVX2", NOSPLIT, "func(c *float64, ldc int, a *float64, lda int, b *float64, ldb int, m int, n int, k int, set bool, lower bool)")
	Doc("productAVX2 sets C = [C] - A B'; see product.")
	Pragma("noescape")
	ldc, lda, ldb := stride("ldc"), stride("lda"), stride("ldb")
	cBase := Load(Param("c"), GP64())
	bBase := Load(Param("b"), GP64())
	left := Load(Param("n"), GP64())
	j := GP64()
	XORQ(j, j)

	group := func(width int) {
		ct, at, rem := GP64(), GP64(), GP64()
		Load(Param("m"), rem)
		Load(Param("a"), at)
		MOVQ(cBase, ct)
		full := label("full")
		lower := Load(Param("lower"), GP8())
		TESTB(lower, lower)
		JZ(LabelRef(full))
		skip := GP64()
		MOVQ(j, skip)
		ANDQ(I8(-4), skip)
		SUBQ(skip, rem)
		LEAQ(Mem{Base: at, Index: skip, Scale: 8}, at)
		LEAQ(Mem{Base: ct, Index: skip, Scale: 8}, ct)
		Label(full)
		rowTiles(rem, func(rows int) {
			c := newColumns(ct, GP64(), ldc, width)
			acc := vectors(rows * width)
			load, ready := label("load"), label("ready")
			set := Load(Param("set"), GP8())
			TESTB(set, set)
			JZ(LabelRef(load))
			for _, v := range acc {
				VXORPD(v, v, v)
			}
			JMP(LabelRef(ready))
			Label(load)
			for i, v := range acc {
				VMOVUPD(c.at(i/rows, i%rows*4), v)
			}
			Label(ready)
			ap, bp, count := GP64(), GP64(), Load(Param("k"), GP64())
			MOVQ(at, ap)
			MOVQ(bBase, bp)
			accumulate(acc, ap, bp, count, lda, ldb, rows, width)
			for i, v := range acc {
				VMOVUPD(v, c.at(i/rows, i%rows*4))
			}
			ADDQ(Imm(uint64(32*rows)), ct)
			ADDQ(Imm(uint64(32*rows)), at)
		})
	}

	six, three, end := label("six"), label("three"), label("end")
	Label(six)
	CMPQ(left, Imm(6))
	JL(LabelRef(three))
	group(6)
	ADDQ(Imm(48), bBase)
	LEAQ(Mem{Base: cBase, Index: ldc, Scale: 4}, cBase)
	LEAQ(Mem{Base: cBase, Index: ldc, Scale: 2}, cBase)
	ADDQ(Imm(6), j)
	SUBQ(Imm(6), left)
	JMP(LabelRef(six))
	Label(three)
	TESTQ(left, left)
	JZ(LabelRef(end))
	group(3)
	Label(end)
	VZEROUPPER()
	RET()
}

func solvePanel() {
	TEXT("solvePanelAVX2", NOSPLIT, "func(x *float64, ldx int, b *float64, ldb int, l *float64, m int, k int, w int)")
	Doc("solvePanelAVX2 sets X = (X - A B') L^-T; see solvePanel.")
	Pragma("noescape")
	ldx, ldb := stride("ldx"), stride("ldb")
	at := Load(Param("x"), GP64())
	rem := Load(Param("m"), GP64())
	k := Load(Param("k"), GP64())
	ct := GP64()
	MOVQ(ldx, ct)
	IMULQ(k, ct)
	ADDQ(at, ct)
	b := Load(Param("b"), GP64())
	l := Load(Param("l"), GP64())

	group := func(width int) {
		rowTiles(rem, func(rows int) {
			c := newColumns(ct, GP64(), ldx, width)
			acc := vectors(rows * width)
			for i, v := range acc {
				VMOVUPD(c.at(i/rows, i%rows*4), v)
			}
			solve := label("solve")
			TESTQ(k, k)
			JZ(LabelRef(solve))
			ap, bp, count := GP64(), GP64(), GP64()
			MOVQ(at, ap)
			MOVQ(b, bp)
			MOVQ(k, count)
			accumulate(acc, ap, bp, count, ldx, ldb, rows, width)
			Label(solve)
			v := YMM()
			t := 0
			for i := range width {
				VBROADCASTSD(Mem{Base: l, Disp: 8 * t}, v)
				t++
				for r := range rows {
					VMULPD(v, acc[i*rows+r], acc[i*rows+r])
					VMOVUPD(acc[i*rows+r], c.at(i, 4*r))
				}
				for o := i + 1; o < width; o++ {
					VBROADCASTSD(Mem{Base: l, Disp: 8 * t}, v)
					t++
					for r := range rows {
						VFNMADD231PD(v, acc[i*rows+r], acc[o*rows+r])
					}
				}
			}
			ADDQ(Imm(uint64(32*rows)), ct)
			ADDQ(Imm(uint64(32*rows)), at)
		})
	}
	three, end := label("three"), label("end")
	w := Load(Param("w"), GP64())
	CMPQ(w, Imm(6))
	JL(LabelRef(three))
	group(6)
	JMP(LabelRef(end))
	Label(three)
	group(3)
	Label(end)
	VZEROUPPER()
	RET()
}

func addRuns() {
	TEXT("addRunsAVX2", NOSPLIT, "func(dst *float64, ldd int, src *float64, lds int, cols int, runs *int32, count int, first int, step int)")
	Doc("addRunsAVX2 adds source columns to target columns run by run; see addRuns.")
	Pragma("noescape")
	dst, src := Load(Param("dst"), GP64()), Load(Param("src"), GP64())
	ldd, lds := stride("ldd"), stride("lds")
	cols := Load(Param("cols"), GP64())
	step, skip := Load(Param("step"), GP64()), Load(Param("first"), GP64())
	column := label("column")
	Label(column)
	{
		rp, count := Load(Param("runs"), GP64()), Load(Param("count"), GP64())
		trim := GP64()
		MOVQ(skip, trim)
		next := label("run")
		Label(next)
		sp, dp, n := GP64(), GP64(), GP64()
		MOVLQSX(Mem{Base: rp}, sp)
		MOVLQSX(Mem{Base: rp, Disp: 4}, dp)
		MOVLQSX(Mem{Base: rp, Disp: 8}, n)
		ADDQ(trim, sp)
		ADDQ(trim, dp)
		SUBQ(trim, n)
		XORQ(trim, trim)
		LEAQ(Mem{Base: src, Index: sp, Scale: 8}, sp)
		LEAQ(Mem{Base: dst, Index: dp, Scale: 8}, dp)
		eight, four, two, one, done := label("eight"), label("four"), label("two"), label("one"), label("done")
		v, w := YMM(), YMM()
		Label(eight)
		SUBQ(Imm(8), n)
		JL(LabelRef(four))
		VMOVUPD(Mem{Base: sp}, v)
		VMOVUPD(Mem{Base: sp, Disp: 32}, w)
		VADDPD(Mem{Base: dp}, v, v)
		VADDPD(Mem{Base: dp, Disp: 32}, w, w)
		VMOVUPD(v, Mem{Base: dp})
		VMOVUPD(w, Mem{Base: dp, Disp: 32})
		ADDQ(Imm(64), sp)
		ADDQ(Imm(64), dp)
		JMP(LabelRef(eight))
		Label(four)
		TESTQ(U32(4), n)
		JZ(LabelRef(two))
		VMOVUPD(Mem{Base: sp}, v)
		VADDPD(Mem{Base: dp}, v, v)
		VMOVUPD(v, Mem{Base: dp})
		ADDQ(Imm(32), sp)
		ADDQ(Imm(32), dp)
		Label(two)
		x := XMM()
		TESTQ(U32(2), n)
		JZ(LabelRef(one))
		VMOVUPD(Mem{Base: sp}, x)
		VADDPD(Mem{Base: dp}, x, x)
		VMOVUPD(x, Mem{Base: dp})
		ADDQ(Imm(16), sp)
		ADDQ(Imm(16), dp)
		Label(one)
		TESTQ(U32(1), n)
		JZ(LabelRef(done))
		VMOVSD(Mem{Base: sp}, x)
		VADDSD(Mem{Base: dp}, x, x)
		VMOVSD(x, Mem{Base: dp})
		Label(done)
		ADDQ(Imm(12), rp)
		DECQ(count)
		JNZ(LabelRef(next))
	}
	ADDQ(lds, src)
	ADDQ(ldd, dst)
	ADDQ(step, skip)
	DECQ(cols)
	JNZ(LabelRef(column))
	VZEROUPPER()
	RET()
}

// columnGroups runs body over groups of six columns, then one of three.
func columnGroups(left, a, lda, x reg.Register, body func(width int)) {
	six, three, end := label("six"), label("three"), label("end")
	Label(six)
	CMPQ(left, Imm(6))
	JL(LabelRef(three))
	body(6)
	LEAQ(Mem{Base: a, Index: lda, Scale: 4}, a)
	LEAQ(Mem{Base: a, Index: lda, Scale: 2}, a)
	ADDQ(Imm(48), x)
	SUBQ(Imm(6), left)
	JMP(LabelRef(six))
	Label(three)
	TESTQ(left, left)
	JZ(LabelRef(end))
	body(3)
	Label(end)
}

func subtractProduct() {
	TEXT("subtractProductAVX2", NOSPLIT, "func(y *float64, a *float64, lda int, x *float64, m int, n int)")
	Doc("subtractProductAVX2 sets y = y - A x; see subtractProduct.")
	Pragma("noescape")
	a, x := Load(Param("a"), GP64()), Load(Param("x"), GP64())
	lda := stride("lda")
	left := Load(Param("n"), GP64())
	columnGroups(left, a, lda, x, func(width int) {
		b := vectors(width)
		for i, v := range b {
			VBROADCASTSD(Mem{Base: x, Disp: 8 * i}, v)
		}
		y, rem := Load(Param("y"), GP64()), Load(Param("m"), GP64())
		p := GP64()
		MOVQ(a, p)
		c := newColumns(p, GP64(), lda, width)
		loop := label("rows")
		Label(loop)
		s := YMM()
		VMOVUPD(Mem{Base: y}, s)
		for i, v := range b {
			VFNMADD231PD(c.at(i, 0), v, s)
		}
		VMOVUPD(s, Mem{Base: y})
		ADDQ(Imm(32), y)
		ADDQ(Imm(32), c.p)
		if width > 3 {
			ADDQ(Imm(32), c.p3)
		}
		SUBQ(Imm(4), rem)
		JG(LabelRef(loop))
	})
	VZEROUPPER()
	RET()
}

func subtractTransposed() {
	mask := GLOBL("masks", RODATA|NOPTR)
	for i := range 8 {
		v := uint64(0)
		if i < 4 {
			v = ^uint64(0)
		}
		DATA(8*i, U64(v))
	}
	TEXT("subtractTransposedAVX2", NOSPLIT, "func(y *float64, a *float64, lda int, x *float64, m int, n int)")
	Doc("subtractTransposedAVX2 sets y = y - A' x; see subtractTransposed.")
	Pragma("noescape")
	a, y := Load(Param("a"), GP64()), Load(Param("y"), GP64())
	lda := stride("lda")
	left := Load(Param("n"), GP64())
	columnGroups(left, a, lda, y, func(width int) {
		acc := vectors(width)
		for _, v := range acc {
			VXORPD(v, v, v)
		}
		x, rem := Load(Param("x"), GP64()), Load(Param("m"), GP64())
		p := GP64()
		MOVQ(a, p)
		c := newColumns(p, GP64(), lda, width)
		loop, tail, sum := label("rows"), label("tail"), label("sum")
		v := YMM()
		Label(loop)
		SUBQ(Imm(4), rem)
		JL(LabelRef(tail))
		VMOVUPD(Mem{Base: x}, v)
		for i, s := range acc {
			VFMADD231PD(c.at(i, 0), v, s)
		}
		ADDQ(Imm(32), x)
		ADDQ(Imm(32), c.p)
		if width > 3 {
			ADDQ(Imm(32), c.p3)
		}
		JMP(LabelRef(loop))
		Label(tail)
		ADDQ(Imm(4), rem)
		JZ(LabelRef(sum))
		m, w := YMM(), YMM()
		mp := GP64()
		LEAQ(mask, mp)
		NEGQ(rem)
		VMOVUPD(Mem{Base: mp, Disp: 32, Index: rem, Scale: 8}, m)
		VMASKMOVPD(Mem{Base: x}, m, v)
		for i, s := range acc {
			VMASKMOVPD(c.at(i, 0), m, w)
			VFMADD231PD(w, v, s)
		}
		Label(sum)
		for i, s := range acc {
			h, t := XMM(), XMM()
			VEXTRACTF128(Imm(1), s, h)
			VADDPD(h, s.AsX(), h)
			VUNPCKHPD(h, h, t)
			VADDSD(t, h, h)
			VMOVSD(Mem{Base: y, Disp: 8 * i}, t)
			VSUBSD(h, t, t)
			VMOVSD(t, Mem{Base: y, Disp: 8 * i})
		}
	})
	VZEROUPPER()
	RET()
}
