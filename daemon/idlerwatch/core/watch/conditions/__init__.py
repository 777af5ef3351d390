"""The first step of the alarms: what is beyond its setpoint, for each alarm and subject.

An alarm of the list names what it `watches`; each module here knows the watches of one subject and says for a sample
the value, in which sense it is judged, for which subjects there is one, and what an installation lacks to have it.
`plan` compiles list and settings once into items; `timers` holds the rule of setpoint, deadband and delays; `memory`
keeps what a condition must remember from one sample to the next.

What is unknown. A figure that is missing in a sample neither raises an alarm nor returns it. A delay that is running
bridges up to `timers.BRIDGE_S` of it, since a meter now and then loses an answer; after a longer gap the delay starts
afresh. A standing alarm whose figure stays unknown stands; that nothing is measured any more is said by the alarms of
the silent meters.
"""
