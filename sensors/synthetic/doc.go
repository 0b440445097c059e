// Package synthetic turns a written scene (or a drawn episode) into the wind
// readings that a set of masts would send, together with the wind that was
// really there.
//
// The wind is a sum of parts, all in east-north-up metres about the airfield's
// reference point, seconds from the start of the scene and metres a second:
//
//	truth   = mean wind + rises + gust fronts + outflows + boundary-layer eddies
//	reading = instrument( truth + surface-layer turbulence of that mast )
//
// Weather gives the truth anywhere, Sampler the readings second by second,
// Scene.Generate the messages with their payloads, each marked as an exercise.
// Everything follows from the scene's seed: each random stream has its own
// generator keyed by its name, so that one more mast or one more fault leaves
// the rest of the scene as it was. The package knows masts and topics, never
// paths or alerts; the expectations of a scene are only parsed here. Next:
// decode.
package synthetic
