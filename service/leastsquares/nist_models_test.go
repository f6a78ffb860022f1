package leastsquares

import "math"

// nistFunction returns y(x; b) and writes dy/db into g. x holds one predictor, or two for Nelson.
type nistFunction func(b, x, g []float64) float64

// nistFunctions are the 27 models as their data files print them.
var nistFunctions = map[string]nistFunction{
	"Bennett5": func(b, x, g []float64) float64 {
		base, power := b[1]+x[0], -1/b[2]
		v := math.Pow(base, power)
		g[0] = v
		g[1] = b[0] * power * v / base
		g[2] = b[0] * v * math.Log(base) / (b[2] * b[2])
		return b[0] * v
	},
	"BoxBOD":   saturation,
	"Chwirut1": chwirut,
	"Chwirut2": chwirut,
	"DanWood": func(b, x, g []float64) float64 {
		v := math.Pow(x[0], b[1])
		g[0], g[1] = v, b[0]*v*math.Log(x[0])
		return b[0] * v
	},
	"ENSO": func(b, x, g []float64) float64 {
		s1, c1 := math.Sincos(2 * math.Pi * x[0] / 12)
		s2, c2 := math.Sincos(2 * math.Pi * x[0] / b[3])
		s3, c3 := math.Sincos(2 * math.Pi * x[0] / b[6])
		g[0], g[1], g[2] = 1, c1, s1
		g[3] = 2 * math.Pi * x[0] / (b[3] * b[3]) * (b[4]*s2 - b[5]*c2)
		g[4], g[5] = c2, s2
		g[6] = 2 * math.Pi * x[0] / (b[6] * b[6]) * (b[7]*s3 - b[8]*c3)
		g[7], g[8] = c3, s3
		return b[0] + b[1]*c1 + b[2]*s1 + b[4]*c2 + b[5]*s2 + b[7]*c3 + b[8]*s3
	},
	"Eckerle4": func(b, x, g []float64) float64 {
		u := (x[0] - b[2]) / b[1]
		v := math.Exp(-u * u / 2)
		y := b[0] / b[1] * v
		g[0] = v / b[1]
		g[1] = y / b[1] * (u*u - 1)
		g[2] = y * u / b[1]
		return y
	},
	"Gauss1":   gaussians,
	"Gauss2":   gaussians,
	"Gauss3":   gaussians,
	"Hahn1":    cubicOverCubic,
	"Thurber":  cubicOverCubic,
	"Lanczos1": decays,
	"Lanczos2": decays,
	"Lanczos3": decays,
	"Kirby2": func(b, x, g []float64) float64 {
		t := x[0]
		above, below := b[0]+t*(b[1]+t*b[2]), 1+t*(b[3]+t*b[4])
		y := above / below
		g[0], g[1], g[2] = 1/below, t/below, t*t/below
		g[3], g[4] = -y*t/below, -y*t*t/below
		return y
	},
	"MGH09": func(b, x, g []float64) float64 {
		t := x[0]
		above, below := t*t+t*b[1], t*t+t*b[2]+b[3]
		y := b[0] * above / below
		g[0], g[1] = above/below, b[0]*t/below
		g[2], g[3] = -y*t/below, -y/below
		return y
	},
	"MGH10": func(b, x, g []float64) float64 {
		d := x[0] + b[2]
		v := math.Exp(b[1] / d)
		g[0], g[1], g[2] = v, b[0]*v/d, -b[0]*v*b[1]/(d*d)
		return b[0] * v
	},
	"MGH17": func(b, x, g []float64) float64 {
		v, w := math.Exp(-x[0]*b[3]), math.Exp(-x[0]*b[4])
		g[0], g[1], g[2] = 1, v, w
		g[3], g[4] = -x[0]*b[1]*v, -x[0]*b[2]*w
		return b[0] + b[1]*v + b[2]*w
	},
	"Misra1a": saturation,
	"Misra1b": func(b, x, g []float64) float64 {
		u := 1 + b[1]*x[0]/2
		g[0], g[1] = 1-1/(u*u), b[0]*x[0]/(u*u*u)
		return b[0] * g[0]
	},
	"Misra1c": func(b, x, g []float64) float64 {
		u := 1 + 2*b[1]*x[0]
		g[0], g[1] = 1-1/math.Sqrt(u), b[0]*x[0]/(u*math.Sqrt(u))
		return b[0] * g[0]
	},
	"Misra1d": func(b, x, g []float64) float64 {
		u := 1 + b[1]*x[0]
		g[0], g[1] = b[1]*x[0]/u, b[0]*x[0]/(u*u)
		return b[0] * g[0]
	},
	"Nelson": func(b, x, g []float64) float64 {
		v := math.Exp(-b[2] * x[1])
		g[0], g[1], g[2] = 1, -x[0]*v, b[1]*x[0]*x[1]*v
		return b[0] - b[1]*x[0]*v
	},
	"Rat42": func(b, x, g []float64) float64 {
		v := math.Exp(b[1] - b[2]*x[0])
		u := 1 + v
		g[0], g[1], g[2] = 1/u, -b[0]*v/(u*u), b[0]*v*x[0]/(u*u)
		return b[0] / u
	},
	"Rat43": func(b, x, g []float64) float64 {
		v := math.Exp(b[1] - b[2]*x[0])
		u := 1 + v
		g[0] = math.Pow(u, -1/b[3])
		y := b[0] * g[0]
		g[1] = -y * v / (b[3] * u)
		g[2] = -g[1] * x[0]
		g[3] = y * math.Log(u) / (b[3] * b[3])
		return y
	},
	"Roszman1": func(b, x, g []float64) float64 {
		d := x[0] - b[3]
		f := 1 / (math.Pi * (d*d + b[2]*b[2]))
		g[0], g[1], g[2], g[3] = 1, -x[0], -d*f, -b[2]*f
		return b[0] - b[1]*x[0] - math.Atan(b[2]/d)/math.Pi
	},
}

func saturation(b, x, g []float64) float64 {
	v := math.Exp(-b[1] * x[0])
	g[0], g[1] = 1-v, b[0]*x[0]*v
	return b[0] * (1 - v)
}

func chwirut(b, x, g []float64) float64 {
	d := b[1] + b[2]*x[0]
	y := math.Exp(-b[0]*x[0]) / d
	g[0], g[1], g[2] = -x[0]*y, -y/d, -y*x[0]/d
	return y
}

func gaussians(b, x, g []float64) float64 {
	e := math.Exp(-b[1] * x[0])
	g[0], g[1] = e, -b[0]*x[0]*e
	y := b[0] * e
	for k := 2; k < 8; k += 3 {
		u := (x[0] - b[k+1]) / b[k+2]
		v := math.Exp(-u * u)
		g[k] = v
		g[k+1] = 2 * b[k] * v * u / b[k+2]
		g[k+2] = g[k+1] * u
		y += b[k] * v
	}
	return y
}

func decays(b, x, g []float64) float64 {
	var y float64
	for k := 0; k < 6; k += 2 {
		v := math.Exp(-b[k+1] * x[0])
		g[k], g[k+1] = v, -b[k]*x[0]*v
		y += b[k] * v
	}
	return y
}

func cubicOverCubic(b, x, g []float64) float64 {
	t := x[0]
	above := b[0] + t*(b[1]+t*(b[2]+t*b[3]))
	below := 1 + t*(b[4]+t*(b[5]+t*b[6]))
	y := above / below
	power := 1.0
	for k := range 4 {
		g[k] = power / below
		power *= t
	}
	power = t
	for k := 4; k < 7; k++ {
		g[k] = -y * power / below
		power *= t
	}
	return y
}
