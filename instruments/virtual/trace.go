package virtual

// trace keeps what a gyro's frames would have been without noise, power-on by power-on. A run of a procedure has none;
// it costs some bytes a frame.
type trace struct{ sessions []*session }

// session is one power-on's trace. Frame k's values are the k-th of each.
type session struct {
	start                 int64 // ns
	inputs, outputs, bias runs
	kept                  runs      // of bias, what the mechanism keeps from its past
	slowSum               []float64 // of all frames up to and with this one
}

func (t *trace) begin(at int64) { t.sessions = append(t.sessions, &session{start: at}) }

func (t *trace) last() *session { return t.sessions[len(t.sessions)-1] }

func (t *trace) input(in []float64) {
	s := t.last()
	for _, w := range in {
		s.inputs.add(w)
	}
}

func (t *trace) output(y, bias, kept float64) {
	s := t.last()
	s.outputs.add(y)
	s.bias.add(bias)
	s.kept.add(kept)
}

func (t *trace) slow(x float64) {
	s := t.last()
	before := 0.0
	if n := len(s.slowSum); n > 0 {
		before = s.slowSum[n-1]
	}
	s.slowSum = append(s.slowSum, before+x)
}

// runs is a sequence of values, of which equal neighbours are kept once, with sums over any part of it.
type runs struct {
	parts []run
	n     int
	total float64
}

type run struct {
	first         int
	before, value float64 // sum of all values before first; the value from there on
}

func (r *runs) add(value float64) {
	if last := len(r.parts) - 1; last < 0 || r.parts[last].value != value {
		r.parts = append(r.parts, run{r.n, r.total, value})
	}
	r.n++
	last := &r.parts[len(r.parts)-1]
	r.total = last.before + float64(r.n-last.first)*last.value
}
