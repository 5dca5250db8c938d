package estimate

import "math"

// Logic is how a counter makes coincidences of two channels.
type Logic string

// The logics.
const (
	EveryPair    Logic = "every_pair"     // each pair of counts within the window is one
	OnePerHerald Logic = "one_per_herald" // each trigger count makes at most one
)

// Accidentals returns the expected chance coincidences S_a S_b W / T in one gate, from the full
// singles (true pairs included), the full window W (s) and the gate T (s): Eckart and Shonka,
// Phys. Rev. 53, 752 (1938). It needs a rate that is constant over the gate; sum it slice by slice.
func Accidentals(a, b, fullWindowS, gateS float64) float64 {
	if gateS <= 0 {
		return 0
	}
	return a * b * fullWindowS / gateS
}

// chanceShadow returns by what factor the excess C - A falls short of the true coincidences,
// because A from the flat singles rate counts chances that could not come. Rates are recorded ones
// (1/s), pairHz that of the excess. To first order in rate times window, derived here, held by
// TestChancesInTheShadowOfDeadTimesAgreeWithEvents:
//
//   - before a herald, while T must have been live, no D count belongs to a recorded pair, and after
//     a recorded partner D is deaf: 1 - mT min(W/2, tauT) - mD min(W/2, tauD);
//   - one_per_herald swallows a chance beside a partner where D was live for both, on either side:
//   - mD (W - 2 min(W/2, tauD)), which without dead time is the usual 1 - A/S; before the herald
//     such chances are fewer by the pairs while T must have been live.
func chanceShadow(logic Logic, mT, mD, pairHz, windowS, tauT, tauD float64) float64 {
	half := windowS / 2
	deafT, deafD := math.Min(half, tauT), math.Min(half, tauD)
	k := 1 - mT*deafT - mD*deafD
	if logic == OnePerHerald {
		k -= mD*(windowS-2*deafD) - pairHz*math.Max(0, deafT-deafD)
	}
	return k
}

// NetCAR is the coincidence-to-accidental ratio (C - A)/A, and GrossCAR is C/A = g2_si(0). They
// are kept apart because both are called CAR in print.
func NetCAR(c, a float64) float64 { return (c - a) / a }

// GrossCAR is C/A; see NetCAR.
func GrossCAR(c, a float64) float64 { return c / a }

// HeraldedG2 is g2(0) of one arm split in two, heralded by the other: N_H N_HAB / (N_HA N_HB).
// Give intervals to few triples by Garwood, not by a square root.
func HeraldedG2(heralds, triples, withA, withB float64) float64 {
	return heralds * triples / (withA * withB)
}
