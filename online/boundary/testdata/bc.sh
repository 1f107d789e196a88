#!/bin/sh
# Reference values to 40 digits, by GNU bc: Mills' ratio by its continued fraction
# (x >= 3) or the power series of Phi (nearer 0); nothing shared with the Go code.
# Prints x and log(Q(x)/phi(x)).
BC_LINE_LENGTH=0 bc -l <<'BC'
scale=60
pi=4*a(1)
/* Phi(x) - 1/2 over phi(x): sum of x^(2k+1)/(2k+1)!! */
define series(x){ auto t,s,k
  t=x; s=x
  for(k=1;k<3000;k++){ t=t*x*x/(2*k+1); s+=t }
  return s }
define phi(x){ return e(-x*x/2)/sqrt(2*pi) }
define fraction(x){ auto k,f
  f=x
  for(k=3000;k>0;k--){ f=x+k/f }
  return 1/f }
define upper(x){ if(x>=3) return phi(x)*fraction(x); return 0.5-phi(x)*series(x) }
define logmills(x){
  if(x>=3) return l(fraction(x))
  if(x<0) return x*x/2+l(2*pi)/2+l(1-upper(-x))
  return l(upper(x)/phi(x)) }
define void show(x){ print x, " ", logmills(x), "\n" }
show(-30); show(-8); show(-1.5); show(-1); show(-0.5); show(0); show(0.5); show(1); show(2.5); show(5); show(10); show(20); show(24.9); show(25.1); show(30); show(40); show(100)
BC
