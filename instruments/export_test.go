package instruments

// RuleNames lists the rules of each role's suite, and "any" those that all share.
func RuleNames() map[string][]string {
	return map[string][]string{
		"any": names(shared[Instrument]()), "table": own(tableRules), "chamber": own(chamberRules),
		"supply": own(supplyRules), "gyro": names(gyroRules),
	}
}

func own[R Instrument](rules []rule[R]) []string { return names(rules[len(shared[R]()):]) }

func names[R any](rules []rule[R]) []string {
	var all []string
	for _, r := range rules {
		all = append(all, r.name)
	}
	return all
}
