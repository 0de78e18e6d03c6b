package display

import "distal/experiments/exact"

// harmonics is an angle over the gait cycle: offset + Σ cos_h cos(2πhp) + sin_h sin(2πhp),
// in degrees, p = 0 … 1 from the heel contact of the same side.
type harmonics struct {
	offset   float64
	cos, sin [6]float64
}

// Sagittal joint angles of comfortable overground walking, right leg: median of
// 24 young adults, six harmonics. Fukuchi CA, Fukuchi RK, Duarte M (2018) A
// public dataset of overground and treadmill walking kinematics and kinetics in
// healthy individuals. PeerJ 6:e4640, doi:10.7717/peerj.4640; data
// doi:10.6084/m9.figshare.5722711 (CC BY 4.0). Positive: hip flexion, knee
// flexion, anterior pelvis tilt.
var (
	pelvisTilt = harmonics{
		10.47110925,
		[6]float64{0.5248061414, 0.7304280384, -0.2265053138, 0.1924152201, -0.08063596055, -0.03973011489},
		[6]float64{0.3209102611, -0.2738452202, 0.05933258166, -0.1093071034, -0.0527373703, 0.000397281881},
	}
	hipFlexion = harmonics{
		16.01061605,
		[6]float64{18.99837988, -3.086367439, -0.4594869431, 0.1203649807, -0.4365969068, 0.04096158336},
		[6]float64{-2.136760626, -0.8972690703, 1.889034628, -0.3685214109, 0.1995390859, -0.009547747912},
	}
	kneeFlexion = harmonics{
		21.11516996,
		[6]float64{-1.984274582, -15.86604222, -1.54598272, -1.011391933, -0.8351308919, 0.1736768178},
		[6]float64{-21.64875781, 5.659172587, 5.165921456, 0.7130203393, 1.002424667, 0.2835402326},
	}
)

// at is the angle in degrees at phase p of the cycle.
func (h *harmonics) at(p float64) float64 {
	angle := h.offset
	for i := range h.cos {
		s, c := exact.SinCos(float64(float64(2*exact.Pi) * float64(i+1) * p))
		angle += float64(h.cos[i]*c) + float64(h.sin[i]*s)
	}
	return angle
}

// Segment lengths and heights as fractions of stature (Drillis R, Contini R
// 1966, Body segment parameters; as in Winter DA, Biomechanics and Motor
// Control of Human Movement, Fig. 4.1).
const (
	hipHeight      = 0.530
	shoulderHeight = 0.818
	thighLength    = 0.245
	shankLength    = 0.246
	upperArmLength = 0.186
	forearmLength  = 0.146
	shoulderHalf   = 0.259 / 2
	hipHalf        = 0.191 / 2
	headCentre     = 0.870 + 0.130/2 // middle of the head
)

// Markers of the point-light walker.
const (
	markerHead = iota
	markerShoulderR
	markerElbowR
	markerWristR
	markerHipR
	markerKneeR
	markerAnkleR
	markerShoulderL
	markerElbowL
	markerWristL
	markerHipL
	markerKneeL
	markerAnkleL
	markerCount
)

// point is a marker in units of stature: forward, up from the ground, and to
// the walker's right, on a treadmill.
type point struct{ forward, up, right float64 }

// leg gives knee and ankle relative to the hip, in units of stature, at phase p
// of the leg's own cycle. Thigh inclination = hip flexion − pelvis tilt, shank
// inclination = thigh − knee flexion.
func leg(p float64) (kneeForward, kneeUp, ankleForward, ankleUp float64) {
	thigh := hipFlexion.at(p) - pelvisTilt.at(p)
	shank := thigh - kneeFlexion.at(p)
	s, c := exact.SinCos(exact.Radians(thigh))
	kneeForward, kneeUp = float64(thighLength*s), float64(-thighLength*c)
	s, c = exact.SinCos(exact.Radians(shank))
	return kneeForward, kneeUp, kneeForward + float64(shankLength*s), kneeUp - float64(shankLength*c)
}

// Movements that the joint-angle data do not hold; common practice, no source:
// arms swing in antiphase to the leg of their side, the elbow bends a little
// more as the arm comes forward, and the body rises and falls twice a cycle,
// lowest at heel contact.
const (
	armSwingDeg   = 16.0
	armMeanDeg    = -4.0
	elbowMeanDeg  = 24.0
	elbowSwingDeg = 9.0
	bobOfStature  = 0.0125 // amplitude: about 4.4 cm from lowest to highest at 1.75 m
)

// walkerAt fills m with the markers at phase p, 0 at the right heel's contact.
func walkerAt(p float64, m *[markerCount]point) {
	bob := float64(-bobOfStature * exact.Cos(float64(float64(4*exact.Pi)*p)))
	m[markerHead] = point{0, headCentre + bob, 0}
	for side, first := range [2]int{markerShoulderR, markerShoulderL} {
		phase, sign := p, 1.0
		if side == 1 {
			phase, sign = p+0.5, -1
		}
		swing := exact.Cos(float64(float64(2*exact.Pi) * (phase + 0.5)))
		arm := armMeanDeg + float64(armSwingDeg*swing)
		fore := arm + elbowMeanDeg + float64(elbowSwingDeg*swing)
		shoulder := point{0, shoulderHeight + bob, float64(sign * shoulderHalf)}
		s, c := exact.SinCos(exact.Radians(arm))
		elbow := point{float64(upperArmLength * s), shoulder.up - float64(upperArmLength*c), shoulder.right}
		s, c = exact.SinCos(exact.Radians(fore))
		wrist := point{elbow.forward + float64(forearmLength*s), elbow.up - float64(forearmLength*c), shoulder.right}

		hip := point{0, hipHeight + bob, float64(sign * hipHalf)}
		kneeForward, kneeUp, ankleForward, ankleUp := leg(phase)
		m[first], m[first+1], m[first+2] = shoulder, elbow, wrist
		m[first+3] = hip
		m[first+4] = point{kneeForward, hip.up + kneeUp, hip.right}
		m[first+5] = point{ankleForward, hip.up + ankleUp, hip.right}
	}
}
