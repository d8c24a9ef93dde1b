# Makes stark_published.csv from the published tables: EMBERLINE_STARK_TABLES=folder python3 extract_stark.py
import os, re, struct, sys
folder=os.environ["EMBERLINE_STARK_TABLES"]
print("source,lower,upper,temperature_k,log_density,log_alpha,log_s")
text=open(folder+"/vcsbalmer.dat").read().split("\n")
for upper,name,limit in ((3,"HALPHA",18),(4,"HBETA",17),(5,"HGAMMA",16.5),(6,"HDELTA",16)):
    start=next(i for i,l in enumerate(text) if l.split()[:1]==[name])+1
    v=[]
    for l in text[start:]:
        if re.match(r"\s*H[A-Z]",l): break
        v+=[l[k:k+8] for k in range(0,len(l.rstrip()),8)]
    for t in (1,3):
        for d in (6,10,14):
            if 10+.5*d<=limit or d<14:
                for a in range(0,26,2):
                    print(f"vcs,2,{upper},{2500*2**t},{10+.5*d},{-3+.2*a:.1f},{float(v[(a*6+t)*17+d])}")
b=open(folder+"/stehle_long.dat.INTEL","rb").read(); r=[]; i=0
while i<len(b):
    n=struct.unpack("<i",b[i:i+4])[0]; r.append(b[i+4:i+4+n]); i+=8+n
f=lambda x: struct.unpack("<%df"%(len(x)//4),x)
names=struct.unpack("<%di"%(len(r[1])//4),r[1])
names=list(zip(names[::2],names[1::2])); T=f(r[2]); N=f(r[3])
import math
for line in ((1,2),(1,3),(2,3),(2,4),(2,5),(2,7)):
    k=names.index(line); A=f(r[8+2*k]); S=f(r[9+2*k])
    for t in (2,4):
        for d in (4,8,11):
            s=[(math.log10(A[j]),math.log10(S[j])) for j in range((d*10+t)*60,(d*10+t)*60+60) if A[j]>0 and S[j]>0]
            s=[x for x in s if -3<=x[0]<=2][::2]
            for x,y in s: print(f"stehle,{line[0]},{line[1]},{T[t]:.0f},{N[d]},{x:.3f},{y:.4f}")
