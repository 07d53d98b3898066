// One plain line a check.

let failures = 0;

/** Prints a check's line. */
export function check(name, ok, figures) {
  if (!ok) failures++;
  console.log(`${ok ? 'ok' : 'FAILED'}: ${name}: ${figures}`);
}

/** Runs a group of checks; an error in it is a failure, not the end of the others. */
export async function group(name, action) {
  try {
    await action();
  } catch (error) {
    failures++;
    console.log(`FAILED: ${name}: ${error.message}`);
    if (process.env.RINGVOLT_TRACE) console.log(error.stack);
  }
}

export function finish() {
  console.log(failures ? `${failures} failed` : 'all passed');
  process.exitCode = failures ? 1 : 0;
}
