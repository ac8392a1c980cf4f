package bench

import (
	"slices"

	"proofrate/instruments"
	"proofrate/instruments/profile"
	"proofrate/limits/quantity"
)

// abilities is what a profile lets its instrument do, in the words of a bench.
type abilities struct {
	roles                 []string
	readings              map[string][]string // by role
	positions, oscillates bool
	supplyChannels        int // 0: one without a number
	channels              []instruments.Channel
	sampleRate            quantity.Value
	frameCounter          bool
}

func abilitiesOf(p *profile.Profile) abilities {
	return abilities{roles: p.Roles, readings: p.Readings, positions: p.CanPosition, oscillates: p.CanOscillate,
		supplyChannels: p.SupplyChannels, channels: p.Channels, sampleRate: p.SampleRate, frameCounter: p.FrameCounter}
}

// all lists the readings of every role of an instrument; a meter's carries the instrument's name.
func (a abilities) all(name string) []string {
	var all []string
	for _, role := range a.roles {
		if role == "meter" {
			all = append(all, name+".value")
		}
		all = append(all, a.readings[role]...)
	}
	slices.Sort(all)
	return slices.Compact(all)
}
