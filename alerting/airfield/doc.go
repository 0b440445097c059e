// Package airfield takes a plain description of an aerodrome (Spec) and gives
// its geometry: a local east-north plane, runways, the landing and take-off
// paths, the ground along them that live masts observe, and the magnetic
// variation. Everything is in metres and degrees true; nothing here knows the
// wind. Next: windfield.
package airfield
