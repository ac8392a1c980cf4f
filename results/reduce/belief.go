package reduce

import (
	"math"
	"math/rand/v2"
)

// belief is what the Allan variances of one recording say of its flicker and random walk: a distribution over (B, K),
// on a grid. White noise and quantisation, which the short averaging times tell well, follow for each (B, K) by least
// squares.
//
// The likelihood of the variances v_i, with expectation s_i, edf nu_i and the correlation R of the law, is normal in
// Wilson and Hilferty's cube roots, k_i = 2/(9 nu_i):
//
//	z_i = ((v_i/s_i)^(1/3) - 1 + k_i)/sqrt(k_i),   log L = -z' R^-1 z/2 - log|R|/2 + sum (log(v_i/s_i)/3 - log(k_i)/2)
//
// The prior is Jeffreys', the root of the Fisher information of (B^2, K^2) with the other terms free. For a single
// variance that is 1/s: the belief is then the chi-square interval with white noise's share subtracted from its bounds.
type belief struct {
	cells   []cell
	hasWalk bool // the likelihood tells K from zero
}

type cell struct {
	model  coefficients
	b, k   [2]float64 // edges of the cell, rad/s and rad/s/sqrt(s)
	weight float64    // they add up to 1
}

const (
	beliefCoarse = 16
	beliefFine   = 24
	// beliefLeast: a row or column of the coarse grid with less than this of the greatest weight is left out.
	beliefLeast = 1e-9
	// beliefStride: every third point of the grid of averaging times, the last one among them; neighbours correlate so
	// much that they say the same.
	beliefStride = 3
	// beliefSlack is added to the diagonal of the correlations, which come from spectra and are good to about as much.
	beliefSlack = 0.01
)

// believe works out the distribution. The grid lies over x and y in 0..1, B = b x/(1-x), K = k y/(1-y) with b and k what
// would make the variance of the longest averaging time on its own; first coarse over all, then fine where weight is.
func (f *noiseFit) believe() belief {
	last := len(f.tauS) - 1
	p := &prospect{f: f}
	p.scaleB = math.Sqrt(f.got.variance(f.tauS[last]) / flickerPlateau)
	p.scaleK = math.Sqrt(3 * f.got.variance(f.tauS[last]) / f.tauS[last])
	for i := last; i >= 0; i -= beliefStride {
		p.points = append(p.points, i)
	}
	p.root = make([][]float64, len(p.points))
	for a := range p.root {
		p.root[a] = make([]float64, a+1)
	}
	p.rows = make([][terms + 1]float64, len(p.points))
	whole := [2]float64{0, 1}
	coarse, _ := p.grid(whole, whole, beliefCoarse)
	x, y := extent(coarse, beliefCoarse)
	cells, most := p.grid(x, y, beliefFine)
	// Likelihood ratio: twice its logarithm against the best without a walk, chi-square of one degree of freedom.
	without := math.Inf(-1)
	for i := range beliefFine {
		b := p.scaleB * odds(x[0]+(x[1]-x[0])*(float64(i)+0.5)/beliefFine)
		_, likelihood, _ := p.log(b*b, 0)
		without = math.Max(without, likelihood)
	}
	return belief{cells, 2*(most-without) > walkDetected}
}

// walkDetected is the quantile at 0.95 of chi square with one degree of freedom: a walk that is not there is detected
// once in forty recordings, since it cannot be negative.
const walkDetected = 3.841

// prospect evaluates cells.
type prospect struct {
	f              *noiseFit
	points         []int // of the grid of averaging times
	scaleB, scaleK float64
	root           [][]float64          // lower triangle
	rows           [][terms + 1]float64 // z and the gradients, solved by root
}

func odds(x float64) float64 { return x / (1 - x) }

// grid evaluates n by n cells over a rectangle of (x, y), and gives the greatest log likelihood.
func (p *prospect) grid(x, y [2]float64, n int) (cells []cell, likeliest float64) {
	edge := func(side [2]float64, i float64) float64 {
		return math.Min(side[0]+(side[1]-side[0])*i/float64(n), 1-1e-6)
	}
	logs := make([]float64, 0, n*n)
	most := math.Inf(-1)
	likeliest = most
	for i := range n {
		for j := range n {
			mx, my := edge(x, float64(i)+0.5), edge(y, float64(j)+0.5)
			b, k := p.scaleB*odds(mx), p.scaleK*odds(my)
			model, likelihood, prior := p.log(b*b, k*k)
			likeliest = math.Max(likeliest, likelihood)
			// dB^2 dK^2 over dx dy, but for constants.
			density := likelihood + prior + math.Log(b*k) - 2*math.Log((1-mx)*(1-my))
			c := cell{model: model, b: [2]float64{p.scaleB * odds(edge(x, float64(i))), p.scaleB * odds(edge(x, float64(i+1)))},
				k: [2]float64{p.scaleK * odds(edge(y, float64(j))), p.scaleK * odds(edge(y, float64(j+1)))}}
			cells, logs = append(cells, c), append(logs, density)
			most = math.Max(most, density)
		}
	}
	sum := 0.0
	for i := range cells {
		cells[i].weight = math.Exp(logs[i] - most)
		sum += cells[i].weight
	}
	for i := range cells {
		cells[i].weight /= sum
	}
	return cells, likeliest
}

// extent is the rectangle of an n by n grid over 0..1 by 0..1 that holds the weight.
func extent(cells []cell, n int) (x, y [2]float64) {
	rows, columns := make([]float64, n), make([]float64, n)
	for i, c := range cells {
		rows[i/n] += c.weight
		columns[i%n] += c.weight
	}
	bounds := func(sums []float64) [2]float64 {
		most := 0.0
		for _, s := range sums {
			most = math.Max(most, s)
		}
		from, to := 0, n
		for from < n-1 && sums[from] < beliefLeast*most {
			from++
		}
		for to > from+1 && sums[to-1] < beliefLeast*most {
			to--
		}
		return [2]float64{float64(max(from-1, 0)) / float64(n), float64(min(to+1, n)) / float64(n)}
	}
	return bounds(rows), bounds(columns)
}

// log is log likelihood and log prior at (B^2, K^2), with the model that they make.
func (p *prospect) log(b2, k2 float64) (model coefficients, likelihood, prior float64) {
	f := p.f
	model = p.fill(b2, k2)
	products := model.products()
	n := len(f.tauS)
	for a, i := range p.points {
		s := model.variance(f.tauS[i])
		spread := dot(&products, &f.law.variance[i])
		k := spread / (9 * s * s) // 2/(9 nu), nu = 2 s^2/spread
		ratio := f.variance[i] / s
		row := &p.rows[a]
		row[terms] = (math.Cbrt(ratio) - 1 + k) / math.Sqrt(k)
		likelihood += math.Log(ratio)/3 - math.Log(k)/2
		for t, c := range column(f.tauS[i]) {
			row[t] = c / math.Sqrt(spread)
		}
		// Row a of the correlation; the points are in falling order, the law is filled above its diagonal.
		line := p.root[a]
		for b := range a {
			line[b] = dot(&products, &f.law.shape[i*n+p.points[b]])
		}
		line[a] = dot(&products, &f.law.shape[i*n+i])
	}
	// Correlations, their Cholesky factor, and the solutions by it, row by row.
	scale := make([]float64, len(p.points))
	for a := range p.points {
		scale[a] = 1 / math.Sqrt(p.root[a][a])
	}
	for a := range p.points {
		line := p.root[a]
		for b := range a {
			line[b] *= scale[a] * scale[b]
			for c := range b {
				line[b] -= line[c] * p.root[b][c]
			}
			line[b] /= p.root[b][b]
		}
		line[a] = 1 + beliefSlack
		for _, c := range line[:a] {
			line[a] -= c * c
		}
		if line[a] <= 0 {
			return model, math.Inf(-1), 0
		}
		line[a] = math.Sqrt(line[a])
		likelihood -= math.Log(line[a])
		row := &p.rows[a]
		for t := range row {
			for b := range a {
				row[t] -= line[b] * p.rows[b][t]
			}
			row[t] /= line[a]
		}
		likelihood -= row[terms] * row[terms] / 2
	}
	return model, likelihood, p.jeffreys()
}

// fill adds to (B^2, K^2) the other terms by weighted least squares.
func (p *prospect) fill(b2, k2 float64) coefficients {
	f := p.f
	rest := make([]float64, len(f.tauS))
	for i, tau := range f.tauS {
		rest[i] = f.variance[i] - b2*flickerPlateau - k2*tau/3
	}
	model := f.problem.solve(rest, [terms]bool{termQ: f.allowed[termQ], termN: true})
	model[termN] = math.Max(model[termN], 1e-6*f.variance[0]*f.tauS[0]) // no output is without white noise
	model[termB], model[termK] = b2, k2
	return model
}

// jeffreys is half the logarithm of the information of (B^2, K^2), the other terms being free: I = G' C^-1 G, |I| over
// |I of the others|. In the order Q, N, B, K that is the product of the last two pivots.
func (p *prospect) jeffreys() float64 {
	var information [terms][terms]float64
	for a := range p.rows {
		for t := range terms {
			for u := range t + 1 {
				information[t][u] += p.rows[a][t] * p.rows[a][u]
			}
		}
	}
	sum := 0.0
	for t := range terms {
		if t == termQ && !p.f.allowed[termQ] {
			continue
		}
		for u := range t {
			if u == termQ && !p.f.allowed[termQ] {
				continue
			}
			// information holds the Cholesky factor up to here.
			for w := range u {
				if w == termQ && !p.f.allowed[termQ] {
					continue
				}
				information[t][u] -= information[t][w] * information[u][w]
			}
			information[t][u] /= information[u][u]
			information[t][t] -= information[t][u] * information[t][u]
		}
		if information[t][t] <= 0 {
			return math.Inf(-1)
		}
		information[t][t] = math.Sqrt(information[t][t])
		if t == termB || t == termK {
			sum += math.Log(information[t][t])
		}
	}
	return sum
}

// draws gives models, as many of each cell as its weight says, placed at random within it.
func (b belief) draws(seed uint64, count int) []coefficients {
	random := rand.New(rand.NewPCG(seed, beliefStream))
	list := make([]coefficients, 0, count)
	next := random.Float64()
	sum := 0.0
	for _, c := range b.cells {
		for sum += c.weight * float64(count); next < sum && len(list) < count; next++ {
			model := c.model
			x := c.b[0] + (c.b[1]-c.b[0])*random.Float64()
			y := c.k[0] + (c.k[1]-c.k[0])*random.Float64()
			model[termB], model[termK] = x*x, y*y
			list = append(list, model)
		}
	}
	return list
}

const beliefStream = 0x62656c696566 // "belief"
