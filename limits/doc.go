// Package limits judges requirements over figures.
//
// A limit is an expression over figures, each standing for its number in the unit that the procedure declared for it.
// A figure is single or a series over labels; an expression over a series is judged element by element, and two series
// in one expression need equal labels. The grammar is expr-lang's; the walk that judges is ours, because a verdict has
// four values and a figure has an uncertainty. A Rule turns a probability of conformity into a Verdict.
//
// Invariants: nothing absent or non-finite reaches an expression: a void figure gives the verdict void before anything
// is computed. Draws come from the seed alone. Values are compared unrounded.
//
//	limit, problems := limits.Compile("abs(bias) <= 2", file, span, figures)
//	judgements := limit.Judge(values, limits.Guarded, seed)
package limits
