// Package procedures is the procedure language: load, check, plan, evaluate.
//
// A Procedure is the document. A Plan is the procedure for one part with its parameters, its loops unrolled into Steps;
// every recording that it will make is known, with its labels, before anything moves. An Evaluation is what a trial's
// recordings come to: figures and judgements.
//
// Invariants: nothing here touches hardware; Evaluate is the only way from recordings to judgements, and its result
// depends on its arguments alone, not on the number of processors; every mistake in a document is found by Load, Plan
// and CheckBench, with its place.
//
//	procedure, file, problems := procedures.Load("bias.yaml", text)
//	plan, problems := procedure.Plan(procedures.Options{Part: "OG-12"})
//	problems = plan.CheckBench(description)
//	evaluation, err := plan.Evaluate(ctx, recordings, description, "A", 1)
package procedures
