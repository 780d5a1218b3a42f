import collections, time
from hypothesis import given, settings
from tests.strategies import cases
from sim import reference
from sim.trace import Trace
C=collections.Counter(); N=[0]
@settings(deadline=None, max_examples=300, database=None)
@given(cases())
def test_a(case):
    t=Trace(); r=reference.run(case.network, case.rules, case.intake, trace=t)
    N[0]+=1
    C.update({k for _,k,_,_ in t.events}); C.update(["n%d"%(len(case.intake)//20*20)])
    if r.on_road_at_start.any(): C["road start"]+=1
    assert not r.faults(case.network.measured_days)
def test_b(): print(N, sorted(C.items()))
