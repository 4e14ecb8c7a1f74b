"""Makes 07_orifice_grid.csv in this folder: orifice figures of a general-purpose library.

Run here, once, with the version of the library that the rows name: python3 make_orifice_grid.py"""
import csv, fluids
from fluids.flow_meter import C_Reader_Harris_Gallagher, orifice_expansibility, differential_pressure_meter_solver
from math import pi
src=f"fluids {fluids.__version__} (PyPI, general-purpose library)"
rows=[];n=0
def add(given,q,v,unit,digits):
    global n; n+=1
    s=f"%.{digits}g"%v
    half=0.500001*10**-(len(s.split('.')[1])) if '.' in s and 'e' not in s else None
    rows.append([f"07_orifice_grid-{n:02}",given,q,s,unit,repr(half),"1e-12","2e-6","ok","half the last printed digit",repr(v),src])
for taps,name in (('corner','corner'),('flange','flange'),('D','D-D/2')):
    for D in (0.06,0.25):
        for b in (0.2,0.5,0.7):
            for Re in (2e4,1e6):
                mu=1e-3; m=Re*pi*D*mu/4
                v=C_Reader_Harris_Gallagher(D=D,Do=b*D,rho=1000.0,mu=mu,m=m,taps=taps)
                add(f"taps={name};D={D};beta={b};Re={Re:g}","C",v,"-",6)
for b in (0.3,0.7):
    for pr in (0.98,0.8):
        v=orifice_expansibility(D=0.1,Do=0.1*b,P1=2e5,P2=2e5*pr,k=1.4)
        add(f"beta={b};p2/p1={pr};kappa=1.4","epsilon",v,"-",6)
for taps,name in (('corner','corner'),('flange','flange'),('D','D-D/2')):
    # kappa is the exponent the library expands with, water or not: the same expansibility is asked of our own code
    for d,dp in ((0.03,10000.0),(0.06,50000.0)):
        v=differential_pressure_meter_solver(D=0.1,D2=d,P1=4e5,P2=4e5-dp,rho=998.2,mu=1.0016e-3,k=1.4,meter_type='ISO 5167 orifice',taps=taps)
        add(f"taps={name};D=0.1;d={d};p1=4e5;dp={dp:g};rho=998.2;mu=1.0016e-3;kappa=1.4","q_m",v,"kg/s",6)
w=csv.writer(open('07_orifice_grid.csv','w'),lineterminator='\n')
w.writerow("case_id,given,quantity,expected,unit,tol_abs,tol_rel_f64,tol_rel_f32,status,tol_why,recomputed,source".split(','))
w.writerows(rows)
