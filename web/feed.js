// Asking the node again and again, and knowing how old its last answer is.
// A feed never presents an old answer as a new one: its age counts from when the question was
// asked, and an answer whose own clock stands still does not count as an answer.

const SECOND_MS = 1000;
const TIMEOUT_MS = 2500;

/** One resource of the node, polled. */
export class Feed {
  /**
   * `path` gives the resource, as a function called before each question, or null when there is
   * nothing to ask; `periodMs` the time from question to question; `staleMs` the age at which the
   * answer stops being current; `onAnswer` gets each answer.
   */
  constructor(path, periodMs, staleMs, onAnswer) {
    this.path = path;
    this.periodMs = periodMs;
    this.staleMs = staleMs;
    this.onAnswer = onAnswer;
    this.answer = null;
    this.begun = moment();
    this.asked = null;
    this.timer = 0;
    this.asking = false;
  }

  /** Asks now, then every period. */
  start() {
    this.begun = moment();
    this.ask();
  }

  /** The age of the newest answer [ms]; before the first, the time waited so far. */
  ageMs() {
    return since(this.asked ?? this.begun);
  }

  /** Whether there is an answer and it is young enough to speak of now. */
  current() {
    return this.answer !== null && this.ageMs() <= this.staleMs;
  }

  /** Asks at once, unless a question is already out. */
  async ask() {
    if (this.asking) return;
    clearTimeout(this.timer);
    this.asking = true;
    const asked = moment();
    const path = this.path();
    let answer = null;
    try {
      answer = path === null ? null : await question(path);
      this.take(answer, asked);
    } finally {
      this.asking = false;
      const periodMs = answer === null ? Math.max(SECOND_MS, this.periodMs) : this.periodMs;
      const wait = Math.max(100, periodMs - since(asked));
      this.timer = setTimeout(() => this.ask(), wait);
    }
  }

  take(answer, asked) {
    if (typeof answer !== "object" || answer === null) return;
    const standsStill = answer.now !== undefined && this.answer?.now === answer.now;
    if (standsStill) return;
    const before = { answer: this.answer, asked: this.asked };
    Object.assign(this, { answer, asked });
    try {
      this.onAnswer(answer);
    } catch (fault) {
      // What could not be shown was not answered: the old picture must not pass for the new one.
      Object.assign(this, before);
      throw fault;
    }
  }
}

/** The node's answer; null when none came, an ordinary event: the age grows and the page tells. */
async function question(path) {
  try {
    const response = await fetch(path, {
      cache: "no-store", headers: { accept: "application/json" },
      signal: AbortSignal.timeout(TIMEOUT_MS),
    });
    return response.ok ? await response.json() : null;
  } catch {
    return null;
  }
}

// Two clocks, because each has a blind spot: the steady one may stop while a laptop sleeps, the
// wall clock may be set back. The larger of the two ages is the careful one.
function moment() {
  return { steady: performance.now(), wall: Date.now() };
}

function since(then) {
  return Math.max(performance.now() - then.steady, Date.now() - then.wall);
}
