/** What a person reads about a published map beside the day. */

import { countText, fixed } from "./words.js";

export const COMPARED_WORDS = {
  about: "Choose a published map of this day (IONEX, plain, .gz or .Z). It is laid beside the day's own maps where these see something: ours less theirs. It is not kept.",
  choose: "Published map",
  asking: "Laying it beside the day …",
  hour: "Hour",
  hours: "Difference by hour",
  heads: ["Hour (UTC)", "Cells", "Mean, TECU", "RMS, TECU"],
  map: (hour, mean) => `Mean difference of vertical delay in the hour from ${hour} UTC, ours less theirs; over the map ${fixed(mean, 2)} m.`,
  ends: (end) => `Colours from ${fixed(-end, 1)} m (theirs is more) to ${fixed(end, 1)} m (ours is more); not painted where one of them says nothing.`,
  count: (cells) => countText(cells, "cell"),
};
