import type { Slider } from "./schema/scene";

const DAY_S = 86400;

/** Minus signs and thin or hard spaces as printed are accepted when typed back. */
function plain(text: string): string {
  return text.replace(/[\u2212\u2013]/g, "-").replace(/[\s\u00a0\u2009\u202f]/g, "");
}

/** The offset meant by the text of a number box, or a sentence that says what is wrong with it. */
export function typedOffset(text: string, slider: Pick<Slider, "kind" | "base" | "box" | "unit">): number | string {
  const typed = plain(text);
  let value: number;
  if (slider.kind === "time_of_day") {
    const parts = /^(\d{1,2}):(\d{1,2}):(\d{1,2}(?:\.\d*)?)$/.exec(typed);
    const [hours, minutes, seconds] = [Number(parts?.[1]), Number(parts?.[2]), Number(parts?.[3])];
    if (!parts || hours > 23 || minutes > 59 || seconds >= 61) {
      return `“${text}” is not a time of day; type hh:mm:ss.sss, for example ${slider.box}`;
    }
    value = hours * 3600 + minutes * 60 + seconds - slider.base;
    // The nearest such time: an offset may cross midnight.
    value -= DAY_S * Math.round(value / DAY_S);
  } else {
    if (!/^[+-]?(\d+\.?\d*|\.\d+)(e[+-]?\d+)?$/i.test(typed)) {
      return `“${text}” is not a number; type it as ${slider.box}${slider.unit ? `, in ${slider.unit}` : ""}`;
    }
    value = Number(typed) - slider.base;
  }
  // Takes away the noise of the subtraction, far below what any offset means.
  return Number(value.toFixed(9)) || 0;
}
