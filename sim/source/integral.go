package source

import (
	"math"

	"gemel/sim/phasematch"
)

// The density of pairs is that of a plane-wave pump in the low-gain limit (Kleinman, Phys. Rev.
// 174, 1027 (1968); Byer and Harris, Phys. Rev. 168, 1064 (1968); recalled from memory) with the
// pump's own spread of directions (Joobeur, Saleh and Teich, Phys. Rev. A 50, 3349 (1994)):
//
//	dR = G sinc²(mismatch L/2) (w²/2 pi) exp(-|q_s + q_i - q_p|² w²/2) dω_s d²q_s d²q_i
//	G  = 2 ω_s ω_i d² P L²/(n_s n_i n_p ε0 c³ (2 pi)³)
//
// with momenta q along the face. What follows integrates it over directions and wavelengths.

const deg = math.Pi / 180

// stand is an arm standing at an angle, positive on the signal's side of the pump: the centre of
// its aperture and the aperture's own two axes, as directions in the laboratory.
type stand struct {
	arm              *Arm
	centre, in, out  [3]float64 // in points along the arm's swing
	sinTilt, cosTilt float64
}

func newStand(arm *Arm, azimuthDeg, angleDeg, tiltDeg float64) stand {
	sa, ca := math.Sincos(azimuthDeg * deg)
	st, ct := math.Sincos(angleDeg * deg)
	se, ce := math.Sincos(arm.OutOfPlaneDeg * deg)
	s := stand{arm: arm}
	for i := range 3 {
		along := [3]float64{ca, sa, 0}[i]
		side := [3]float64{-sa, ca, 0}[i]
		z := [3]float64{0, 0, 1}[i]
		swing := st*along + ct*z
		s.centre[i] = ce*swing + se*side
		s.in[i] = ct*along - st*z
		s.out[i] = ce*side - se*swing
	}
	s.sinTilt, s.cosTilt = math.Sincos(tiltDeg * deg)
	return s
}

// face gives the components of a laboratory vector along the face, and along its normal.
func (s *stand) face(v [3]float64) (x, y, n float64) {
	return v[0]*s.cosTilt - v[2]*s.sinTilt, v[1], v[0]*s.sinTilt + v[2]*s.cosTilt
}

// ray is a direction that an aperture lets in: components along the face, and its share of the
// solid angle (times transmittance and the cosine to the face normal).
type ray struct{ x, y, weight float64 }

// rays fills an aperture with directions. swell and sweep are the numbers of points across and
// around. mirrored says that everything is the same on both sides of the plane the arms turn in,
// so that one side does for both.
func (s *stand) rays(r *rules, swell, sweep int, mirrored bool) []ray {
	out := make([]ray, 0, swell*sweep)
	add := func(x, y, area float64) {
		if mirrored {
			if y < -1e-12 {
				return
			}
			if y > 1e-12 {
				area *= 2
			}
		}
		d := s.arm.DistanceMm
		l := math.Sqrt(d*d + x*x + y*y)
		var v [3]float64
		for i := range 3 {
			v[i] = (d*s.centre[i] + x*s.in[i] + y*s.out[i]) / l
		}
		fx, fy, fn := s.face(v)
		if fn > 0 {
			out = append(out, ray{fx, fy, area * d / (l * l * l) * fn})
		}
	}
	a := s.arm.RadiusMm
	if s.arm.Aperture == Gaussian {
		// exp(-2 r²/a²): a normal density of rms a/2 in each direction, times pi a²/2.
		h, v := r.normal(float64(swell), 0, 1), r.normal(float64(sweep), 0, 1)
		for i, x := range h.x {
			for j, y := range v.x {
				add(x*a/2, y*a/2, math.Pi*a*a/2*h.w[i]*v.w[j])
			}
		}
		return out
	}
	// Even in r² and in angle: the disc's area without a singular centre.
	g := r.legendre[swell]
	sweep += sweep % 2
	for i, x := range g.x {
		rho := a * math.Sqrt((x+1)/2)
		for j := range sweep {
			sn, cs := math.Sincos(2 * math.Pi * (float64(j) + 0.5) / float64(sweep))
			add(rho*cs, rho*sn, math.Pi*a*a*g.w[i]/2/float64(sweep))
		}
	}
	return out
}

// colour is one wavelength of the photon in the first arm.
type colour struct {
	pair   phasematch.Pair
	weight float64 // d omega in 1/s, times the filters, times G without d² P L² and constants
}

// band is a set of colours and what it was made for.
type band struct {
	slab    phasematch.Slab
	colours []colour
}

// window is the range of wavelengths that matter behind a filter: all but 1e-5 of its light.
func (f Filter) window() (lo, hi float64) {
	if f.WidthNm <= 0 {
		return 0, math.Inf(1)
	}
	if f.Shape == FilterFlat {
		return f.CentreNm - f.WidthNm/2, f.CentreNm + f.WidthNm/2
	}
	reach := 4.5 * f.rmsNm()
	return f.CentreNm - reach, f.CentreNm + reach
}

// Passes is the transmittance of the filter relative to its peak.
func (f Filter) Passes(nm float64) float64 {
	if f.WidthNm <= 0 {
		return 1
	}
	x := (nm - f.CentreNm) / f.WidthNm
	if f.Shape == FilterFlat {
		if math.Abs(x) <= 0.5 {
			return 1
		}
		return 0
	}
	return math.Exp(-4 * math.Ln2 * x * x)
}

// colours finds the wavelengths of a first photon, and the density of its filter and its
// partner's, and calls add for each with its share of the wavelength scale in nm.
func (b *band) choose(r *rules, first Filter, partner *Filter, at ray, effort float64, add func(nm, share float64)) {
	slab := &b.slab
	lo, hi := slab.Band()
	f0, f1 := first.window()
	normal := first.WidthNm > 0 && first.Shape == FilterGaussian && lo < f0 && f1 < hi
	centre, rms := first.CentreNm, first.rmsNm()
	lo, hi = max(lo, f0), min(hi, f1)
	if partner != nil && partner.WidthNm > 0 {
		p0, p1 := partner.window()
		q0, q1 := lo, hi
		if p1 > slab.PumpNm {
			q0 = phasematch.Idler(slab.PumpNm, p1)
		}
		if p0 > slab.PumpNm {
			q1 = phasematch.Idler(slab.PumpNm, p0)
		}
		normal = normal && partner.Shape == FilterGaussian && q0 > slab.PumpNm
		if normal {
			// Two normal densities over the first photon's wavelength make one.
			c := phasematch.Idler(slab.PumpNm, partner.CentreNm)
			s := partner.rmsNm() * (c - slab.PumpNm) / (partner.CentreNm - slab.PumpNm)
			u, v := 1/(rms*rms), 1/(s*s)
			centre, rms = (centre*u+c*v)/(u+v), 1/math.Sqrt(u+v)
		}
		lo, hi = max(lo, q0), min(hi, q1)
	}
	if !(lo < hi) {
		return
	}
	if normal {
		lo, hi = centre-1.5*rms, centre+1.5*rms
	}
	// As many colours as the phase turns over the band.
	turn, last := 0.0, math.NaN()
	for i := range 17 {
		p, err := slab.At(lo + (hi-lo)*(float64(i)+0.001)/16.002)
		if err != nil {
			continue
		}
		_, k, _ := p.Wavenumbers()
		qp := p.PumpAlongFace()
		now := (p.PumpNormal(qp, 0) - p.SignalNormal(k*at.x, k*at.y) - p.IdlerNormal(qp-k*at.x, -k*at.y)) * slab.ThicknessMm / 2
		if d := math.Abs(now - last); !math.IsNaN(d) {
			turn += d
		}
		last = now
	}
	if normal {
		h := r.normal(5, turn/3, effort)
		for i, x := range h.x {
			// The density of the rule goes out again, the filters come in with the colour.
			add(centre+rms*x, h.w[i]*rms*math.Sqrt(2*math.Pi)*math.Exp(x*x/2))
		}
		return
	}
	g := r.legendre[points((13+1.2*turn)*effort, 4, mostLegendre)]
	for i, x := range g.x {
		add((lo+hi)/2+(hi-lo)/2*x, g.w[i]*(hi-lo)/2)
	}
}

// rmsNm is the width of a Gaussian filter as the rms of a normal density.
func (f Filter) rmsNm() float64 { return f.WidthNm / (2 * math.Sqrt(2*math.Ln2)) }

// newBand chooses the colours of a first photon behind a filter, and of its partner behind
// another when partner is not nil, for directions near one.
func newBand(r *rules, slab phasematch.Slab, first Filter, partner *Filter, at ray, effort float64) band {
	b := band{slab: slab}
	b.choose(r, first, partner, at, effort, func(nm, share float64) {
		if !(nm > slab.PumpNm) {
			return
		}
		p, err := slab.At(nm)
		if err != nil {
			return
		}
		weight := share * first.Passes(nm)
		if partner != nil {
			weight *= partner.Passes(p.IdlerNm)
		}
		np, ns, ni := p.Indices()
		omegaS, omegaI := 2*math.Pi*lightSpeed/(nm*1e-9), 2*math.Pi*lightSpeed/(p.IdlerNm*1e-9)
		weight *= 2 * math.Pi * lightSpeed / (nm * nm * 1e-9) // d omega/d lambda, 1/s a nm
		weight *= omegaS * omegaI / (np * ns * ni)
		if weight > 0 {
			b.colours = append(b.colours, colour{p, weight})
		}
	})
	return b
}

// sinc2 is sinc²(x) near enough for a sum: 1e-7.
func sinc2(x float64) float64 {
	if x*x < 1e-3 {
		return 1 - x*x/3
	}
	s := math.Sin(x) / x
	return s * s
}

// single integrates over everything that the partner may do: what one arm sees of the pairs.
func (b *band) single(r *rules, rays []ray, waistMm, offset, effort float64) float64 {
	half := b.slab.ThicknessMm / 2
	total := 0.0
	for ci := range b.colours {
		c := &b.colours[ci]
		p := &c.pair
		_, k, _ := p.Wavenumbers()
		qp := p.PumpAlongFace()
		sum := 0.0
		for _, s := range rays {
			sx, sy := k*s.x, k*s.y
			gx, gy := p.PartnerSlope(sx, sy)
			g := math.Hypot(gx, gy)
			ex, ey := 1.0, 0.0
			if g > 0 {
				ex, ey = gx/g, gy/g
			}
			h := r.normal(4, g/waistMm*half, effort)
			ks := p.SignalNormal(sx, sy)
			// The mismatch with the pump u rms off its axis along the slope and v across it.
			mismatch := func(u, v float64) float64 {
				qx, qy := qp+(u*ex-v*ey)/waistMm, (u*ey+v*ex)/waistMm
				return p.PumpNormal(qx, qy) - ks - p.IdlerNormal(qx-sx, qy-sy) + offset
			}
			// Across the slope two points, one rms to each side, are exact to third order; where the
			// mismatch hardly bends one in the middle is, with what they would add.
			side, bend := 1.0, 0.0
			if b := (mismatch(0, 1)+mismatch(0, -1))/2 - mismatch(0, 0); math.Abs(b*half) < 0.1/effort {
				side, bend = 0, b
			}
			inner := 0.0
			for i, u := range h.x {
				v := sinc2((mismatch(u, side) + bend) * half)
				if side != 0 {
					v = (v + sinc2(mismatch(u, -side)*half)) / 2
				}
				if v == v { // NaN where the partner cannot propagate
					inner += h.w[i] * v
				}
			}
			sum += s.weight * inner
		}
		total += c.weight * k * k * sum
	}
	return total
}

// both integrates over the apertures of two arms: rays fill that of the first, partner stands
// for that of the other. spectrum, when not nil, receives each colour's share.
func (b *band) both(r *rules, rays []ray, partner *stand, waistMm, offset, effort float64, spectrum []float64) float64 {
	half := b.slab.ThicknessMm / 2
	a, d := partner.arm.RadiusMm, partner.arm.DistanceMm
	iris := partner.arm.Aperture == Iris
	fx, fy, _ := partner.face(partner.centre)
	ux, uy, _ := partner.face(partner.in)
	vx, vy, _ := partner.face(partner.out)
	total := 0.0
	for ci := range b.colours {
		c := &b.colours[ci]
		p := &c.pair
		_, k, ki := p.Wavenumbers()
		qp := p.PumpAlongFace()
		// Momentum along the face as a linear function of the place in the aperture, in mm. Turn the
		// aperture's axes so that the first one is the direction in which the mismatch changes.
		gx, gy := p.PartnerSlope(qp-ki*fx, -ki*fy)
		j := ki / d
		sn, cs := math.Sincos(math.Atan2(gx*vx+gy*vy, gx*ux+gy*uy))
		jxx, jxy := j*(ux*cs+vx*sn), j*(vx*cs-ux*sn) // q_x by first and second axis
		jyx, jyy := j*(uy*cs+vy*sn), j*(vy*cs-uy*sn)
		det := jxx*jyy - jxy*jyx
		w2 := waistMm * waistMm
		// The pump's spread as a normal density over the aperture: exp(-(r-c)M(r-c)/2).
		m11, m12, m22 := w2*(jxx*jxx+jyx*jyx), w2*(jxx*jxy+jyx*jyy), w2*(jxy*jxy+jyy*jyy)
		slope := math.Abs(gx*jxx + gy*jyx) // of the mismatch along the first axis, 1/mm²
		norm := math.Abs(det) * w2 / (2 * math.Pi)
		// Across that axis the mismatch changes so little that one point in the middle will do?
		thin := half/waistMm*(a/d+1/(waistMm*ki)) < 0.1/effort
		sum := 0.0
		for _, s := range rays {
			sx, sy := k*s.x, k*s.y
			ks := p.SignalNormal(sx, sy)
			// Where the partner of this ray goes when the pump runs along its axis.
			dx, dy := qp-sx-ki*fx, -sy-ki*fy
			cx, cy := (dx*jyy-dy*jxy)/det, (dy*jxx-dx*jyx)/det
			value := func(x, y float64) float64 {
				ox, oy := x-cx, y-cy
				qx, qy := qp+jxx*ox+jxy*oy, jyx*ox+jyy*oy
				v := sinc2((p.PumpNormal(qx, qy) - ks - p.IdlerNormal(qx-sx, qy-sy) + offset) * half)
				if v != v {
					return 0
				}
				return v
			}
			inner := 0.0
			if iris {
				mx := m11 - m12*m12/m22
				rx, ry := 1/math.Sqrt(mx), 1/math.Sqrt(m22)
				const reach = 4.8
				lo, hi := max(-a, cx-reach*rx), min(a, cx+reach*rx)
				if !(lo < hi) {
					continue
				}
				// x = a sin(t) takes the corners off the chords' ends.
				t0, t1 := math.Asin(lo/a), math.Asin(hi/a)
				g := r.legendre[points((10+1.1*slope*half*(hi-lo)/2)*effort, 6, mostLegendre)]
				for i, u := range g.x {
					st, ct := math.Sincos((t0+t1)/2 + (t1-t0)/2*u)
					x, chord := a*st, a*ct
					mid := cy - m12/m22*(x-cx)
					low, high := (-chord-mid)/ry, (chord-mid)/ry
					share, shift, spread := 1.0, 0.0, 1.0
					if low > -6 || high < 6 { // else the chord cuts nothing off
						if share = (math.Erf(high/math.Sqrt2) - math.Erf(low/math.Sqrt2)) / 2; share < 1e-9 {
							continue
						}
						el, eh := bell(low), bell(high)
						shift = (el - eh) / share
						spread = max(0, 1-shift*shift+(low*el-high*eh)/share)
					}
					y, e := mid+ry*shift, ry*math.Sqrt(spread)
					w := g.w[i] * (t1 - t0) / 2 * chord * math.Exp(-(x-cx)*(x-cx)*mx/2) * share * ry * math.Sqrt(2*math.Pi)
					if thin {
						inner += w * value(x, y)
						continue
					}
					inner += w * (value(x, y-e) + value(x, y+e)) / 2
				}
			} else {
				// Two normal densities make one.
				add := 4 / (a * a)
				n11, n22 := m11+add, m22+add
				dn := n11*n22 - m12*m12
				bx, by := m11*cx+m12*cy, m12*cx+m22*cy
				ex, ey := (n22*bx-m12*by)/dn, (n11*by-m12*bx)/dn
				height := math.Exp(-(cx*bx + cy*by - ex*bx - ey*by) / 2)
				if height < 1e-12 {
					continue
				}
				rx, ry := math.Sqrt(n22/dn), 1/math.Sqrt(n22)
				h := r.normal(5, slope*rx*half, effort)
				for i, u := range h.x {
					x := ex + rx*u
					mid := ey - m12/n22*(x-ex)
					if thin {
						inner += h.w[i] * value(x, mid)
						continue
					}
					inner += h.w[i] * (value(x, mid-ry) + value(x, mid+ry)) / 2
				}
				inner *= height * 2 * math.Pi / math.Sqrt(dn)
			}
			sum += s.weight * inner
		}
		v := c.weight * k * k * norm * sum
		total += v
		if spectrum != nil {
			spectrum[ci] = v
		}
	}
	return total
}

// bell is the standard normal density.
func bell(x float64) float64 { return math.Exp(-x*x/2) / math.Sqrt(2*math.Pi) }
