import { exp4, sigmoid4, softplus4, tanh4 } from './elementary'
export { coverage, coverageWorkBytes } from './coverage'
export { metaGradient, metaGradientWorkBytes } from './meta-gradient'
export { gather, normalise, normaliseMotion, predictMotion, predictNormalised, spread } from './rows'
export { addGradient, addLossSums, applySteps, squaredErrors, stepWorkBytes, weightsOfRows } from './step'
export { squaredDistance } from './updates'

/** First address not used by the module itself. */
export function heapBase(): usize {
  return __heap_base
}

/** Applies an elementary function to `count` values (a multiple of 4): 0 exp, 1 tanh, 2 softplus, 3 sigmoid. */
export function elementary(which: i32, values: usize, count: i32, out: usize): void {
  const end = values + (<usize>count << 2)
  for (; values < end; values += 16, out += 16) {
    const x = v128.load(values)
    if (which == 0) v128.store(out, exp4(x))
    else if (which == 1) v128.store(out, tanh4(x))
    else if (which == 2) v128.store(out, softplus4(x))
    else v128.store(out, sigmoid4(x))
  }
}
