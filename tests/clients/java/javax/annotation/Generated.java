package javax.annotation;

/** What the generator marks its classes with; usually from the package jakarta.annotation-api, version 1. */
public @interface Generated {
    String[] value();

    String date() default "";

    String comments() default "";
}
