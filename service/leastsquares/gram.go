package leastsquares

// gramBlock is the number of rows handled at a time: seven columns of it stay in the first-level cache, so that a column is
// fetched from further away once and not once for each partner. Summing by blocks also keeps rounding small for long sweeps.
const gramBlock = 384

// gram sets product (p by p, row-major, upper triangle) to JᵀJ and gradient to Jᵀr. jacobian is column-major with n rows.
//
// Columns are taken in pairs against two or three partners at a time. Such a tile has four to seven independent sums: enough to
// hide the latency of an addition, which a single dot product waits for, and few enough to stay in registers. Measured on
// amd64, 0.17 ns a product against 0.30 ns for a dot product unrolled four times; unrolling the tiles as well makes them slower.
func gram(jacobian, residual, product, gradient []float64) {
	n, p := len(residual), len(gradient)
	clear(product[:p*p])
	clear(gradient)
	for from := 0; from < n; from += gramBlock {
		to := min(from+gramBlock, n)
		r := residual[from:to]
		column := func(k int) []float64 { return jacobian[k*n+from : k*n+to] }
		k := 0
		for ; k+1 < p; k += 2 {
			a, b := column(k), column(k+1)
			first, second := product[k*p:(k+1)*p], product[(k+1)*p:(k+2)*p]
			var aa, ab, bb, ar, br float64
			last := p // partners k+2 .. last-1 remain for the tiles
			if (p-k-2)%3 == 1 {
				last--
				var ac, bc float64
				aa, ab, bb, ar, br, ac, bc = cornerOfFour(a, b, r, column(last))
				first[last] += ac
				second[last] += bc
			} else {
				aa, ab, bb, ar, br = cornerOfThree(a, b, r)
			}
			first[k] += aa
			first[k+1] += ab
			second[k+1] += bb
			gradient[k] += ar
			gradient[k+1] += br

			j := k + 2
			for ; j+2 < last; j += 3 {
				ac, ad, ae, bc, bd, be := twoByThree(a, b, column(j), column(j+1), column(j+2))
				first[j] += ac
				first[j+1] += ad
				first[j+2] += ae
				second[j] += bc
				second[j+1] += bd
				second[j+2] += be
			}
			if j < last {
				ac, ad, bc, bd := twoByTwo(a, b, column(j), column(j+1))
				first[j] += ac
				first[j+1] += ad
				second[j] += bc
				second[j+1] += bd
			}
		}
		if k < p {
			a := column(k)
			product[k*p+k] += dot(a, a)
			gradient[k] += dot(a, r)
		}
	}
}

// twoByThree returns the products of a and b with c, d and e. All five slices have the length of a.
func twoByThree(a, b, c, d, e []float64) (ac, ad, ae, bc, bd, be float64) {
	n := len(a)
	b, c, d, e = b[:n], c[:n], d[:n], e[:n]
	for i, a0 := range a {
		b0, c0 := b[i], c[i]
		ac += a0 * c0
		bc += b0 * c0
		d0 := d[i]
		ad += a0 * d0
		bd += b0 * d0
		e0 := e[i]
		ae += a0 * e0
		be += b0 * e0
	}
	return
}

// twoByTwo returns the products of a and b with c and d.
func twoByTwo(a, b, c, d []float64) (ac, ad, bc, bd float64) {
	n := len(a)
	b, c, d = b[:n], c[:n], d[:n]
	for i, a0 := range a {
		b0, c0, d0 := b[i], c[i], d[i]
		ac += a0 * c0
		ad += a0 * d0
		bc += b0 * c0
		bd += b0 * d0
	}
	return
}

// cornerOfThree returns the products of a and b with themselves, each other and r.
func cornerOfThree(a, b, r []float64) (aa, ab, bb, ar, br float64) {
	n := len(a)
	b, r = b[:n], r[:n]
	for i, a0 := range a {
		b0, r0 := b[i], r[i]
		aa += a0 * a0
		ab += a0 * b0
		bb += b0 * b0
		ar += a0 * r0
		br += b0 * r0
	}
	return
}

// cornerOfFour is cornerOfThree with one partner more, so that a pair never meets a lone column.
func cornerOfFour(a, b, r, c []float64) (aa, ab, bb, ar, br, ac, bc float64) {
	n := len(a)
	b, r, c = b[:n], r[:n], c[:n]
	for i, a0 := range a {
		b0, r0 := b[i], r[i]
		aa += a0 * a0
		ab += a0 * b0
		bb += b0 * b0
		ar += a0 * r0
		br += b0 * r0
		c0 := c[i]
		ac += a0 * c0
		bc += b0 * c0
	}
	return
}

// dot returns a·b. b has the length of a.
func dot(a, b []float64) float64 {
	n := len(a)
	b = b[:n]
	var s0, s1, s2, s3 float64
	i := 0
	for ; i+3 < n; i += 4 {
		s0 += a[i] * b[i]
		s1 += a[i+1] * b[i+1]
		s2 += a[i+2] * b[i+2]
		s3 += a[i+3] * b[i+3]
	}
	for ; i < n; i++ {
		s0 += a[i] * b[i]
	}
	return s0 + s1 + (s2 + s3)
}
