"""The simulated rig: a backend plugin like any other.

The session talks to it in the link's bytes; behind them stand the real box core under a clock of
its own, line latencies, a cell and its synapses, an amplifier with an acquisition, and a hidden
plasticity rule that is not the forecast's.

Where it is unlike a real rig
-----------------------------
* The box core is the Python one: it fires exactly at its tick. A microcontroller has interrupt
  latency, and its pins have rise times.
* Latencies are independent normal draws around a mean (plus creep); real ones are skewed and
  correlated from pairing to pairing.
* The scripted cell draws its spikes and adds templates: its EPSPs never fire it, nothing shunts
  anything. The conductance cell is one compartment with squid-axon kinetics moved along the voltage
  axis; it has no dendrite, no calcium, and no slow conductances.
* The detector is a peak detector without false alarms; it is not blinded by the artefact.
* Drift of access and input resistance, pipette drift, rundown and the like are absent unless a
  knob says so; bath and temperature do not exist.
* Hidden plasticity is one published rule with parameters drawn per seed. It says nothing about any
  preparation. A record made here is marked SIMULATED and is evidence of nothing biological.
"""
