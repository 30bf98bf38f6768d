from mpmath import *
mp.dps=30
def S(t,nu): # P(T>t)
    x=mpf(nu)/(nu+t*t)
    s=betainc(mpf(nu)/2,mpf(1)/2,0,x,regularized=True)/2
    return s if t>=0 else 1-s
def f(t,nu): return gamma((nu+1)/mpf(2))/(sqrt(nu*pi)*gamma(nu/mpf(2)))*(1+t*t/nu)**(-(nu+1)/mpf(2))
def bf(a,b,d): # P(mu_a-mu_b>d)
    na,ma,sa=a; nb,mb,sb=b
    ea=sa/sqrt(mpf(na)); eb=sb/sqrt(mpf(nb))
    # a = ma+ea Ta ; P(Ta > (d - ma + mb + eb Tb)/ea)
    g=lambda t: f(t,nb-1)*S((d-ma+mb+eb*t)/ea,na-1)
    return quad(g,[-inf,-40,-20,-10,-6,-4,-2,-1,0,1,2,4,6,10,20,40,inf])
import csv
def groups(file,key,val):
    g={}
    for r in csv.DictReader(open(file)): g.setdefault(r[key],[]).append(mpf(r[val]))
    out={}
    for k,v in g.items():
        n=len(v); m=sum(v)/n; out[k]=(n,m,sqrt(sum((x-m)**2 for x in v)/(n-1)))
    return out
o=groups('testdata/data/oxide.csv','source','thickness'); print({k:(v[0],nstr(v[1],20),nstr(v[2],20)) for k,v in o.items()})
print('oxide 1-2>0',nstr(bf(o['1'],o['2'],0),20)); print('2-1>5',nstr(bf(o['2'],o['1'],5),20))
m=groups('testdata/data/morley.csv','experiment','speed'); print({k:(v[0],nstr(v[1],20),nstr(v[2],20)) for k,v in m.items()})
print('morley 1-2>0',nstr(bf(m['1'],m['2'],0),20)); print('1-5>20', nstr(bf(m['1'],m['5'],20),20))
